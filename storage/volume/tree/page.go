package tree

import (
	"bytes"
	"encoding/binary"

	"example.com/admit/storage/volume/damage"
)

const (
	kindBranch   = 1
	kindLeaf     = 2
	kindFreelist = 16

	branchElement = 16
	leafElement   = 16

	flagBucket = 1
)

// page is one checked tree page with its overflow, or an inline bucket. fetch, where set, brings parts of a long page that buf does not
// hold: a structural check needs the keys of large values, not the values.
type page struct {
	id    uint64
	leaf  bool
	count int
	size  int // bytes of the page with overflow
	buf   []byte
	fetch func(offset, n int) ([]byte, error)
}

// bytes returns n bytes at offset. Callers have checked offset+n against size.
func (p *page) bytes(offset, n int) ([]byte, error) {
	if offset+n <= len(p.buf) {
		return p.buf[offset : offset+n : offset+n], nil
	}
	if p.fetch == nil {
		return nil, damage.OnPage(p.id, "element reaches beyond the page")
	}
	return p.fetch(offset, n)
}

// element is one decoded entry; for a branch, child is set and value is empty.
type element struct {
	key       []byte
	child     uint64
	bucket    bool
	valueAt   int
	valueSize int
}

// parsePage checks the whole of a page: header, element table, contiguity and order of keys.
func parsePage(p *page, wantID uint64) error {
	order := binary.LittleEndian
	if id := order.Uint64(p.buf); id != wantID {
		return damage.OnPage(wantID, "the page says it is page %d", id)
	}
	p.id = wantID
	switch kind := order.Uint16(p.buf[8:]); kind {
	case kindBranch:
	case kindLeaf:
		p.leaf = true
	default:
		return damage.OnPage(wantID, "kind %#x is neither branch nor leaf", kind)
	}
	p.count = int(order.Uint16(p.buf[10:]))
	if p.count == 0 {
		return p.checkEmpty()
	}
	if headerSize+p.count*leafElement > p.size {
		return damage.OnPage(wantID, "%d elements do not fit %d bytes", p.count, p.size)
	}
	end := headerSize + p.count*leafElement
	var previous []byte
	for i := range p.count {
		e, start, err := p.element(i)
		if err != nil {
			return err
		}
		if start != end {
			return damage.OnPage(wantID, "element %d begins at byte %d, not %d", i, start, end)
		}
		if i > 0 && bytes.Compare(previous, e.key) >= 0 {
			return damage.OnPage(wantID, "key %d does not ascend", i)
		}
		previous = e.key
		end = start + len(e.key) + e.valueSize
	}
	return nil
}

// checkEmpty accepts a page without elements only if nothing was ever written in it: bbolt writes pages from zeroed buffers, so a count
// that was flipped to zero betrays itself.
func (p *page) checkEmpty() error {
	if !p.leaf || p.size > PageSize {
		return damage.OnPage(p.id, "a page without elements is not a plain leaf")
	}
	for _, b := range p.buf[headerSize:] {
		if b != 0 {
			return damage.OnPage(p.id, "the page counts no elements but holds some")
		}
	}
	return nil
}

// element decodes entry i and returns where its key starts.
func (p *page) element(i int) (element, int, error) {
	at := headerSize + i*leafElement
	raw, err := p.bytes(at, leafElement)
	if err != nil {
		return element{}, 0, err
	}
	order := binary.LittleEndian
	var e element
	var position, keySize uint64
	if p.leaf {
		flags := order.Uint32(raw)
		if flags > flagBucket {
			return element{}, 0, damage.OnPage(p.id, "element %d has flags %#x", i, flags)
		}
		e.bucket = flags == flagBucket
		position, keySize = uint64(order.Uint32(raw[4:])), uint64(order.Uint32(raw[8:]))
		e.valueSize = int(order.Uint32(raw[12:]))
	} else {
		position, keySize = uint64(order.Uint32(raw)), uint64(order.Uint32(raw[4:]))
		e.child = order.Uint64(raw[8:])
	}
	start := uint64(at) + position
	if keySize == 0 || start+keySize+uint64(e.valueSize) > uint64(p.size) {
		return element{}, 0, damage.OnPage(p.id, "element %d lies outside its page", i)
	}
	if e.key, err = p.bytes(int(start), int(keySize)); err != nil {
		return element{}, 0, err
	}
	e.valueAt = int(start + keySize)
	return e, int(start), nil
}

// find returns the first entry whose key is at or after key, and whether it is equal.
func (p *page) find(key []byte) (int, bool, error) {
	low, high := 0, p.count
	for low < high {
		middle := (low + high) / 2
		e, _, err := p.element(middle)
		if err != nil {
			return 0, false, err
		}
		switch bytes.Compare(e.key, key) {
		case 0:
			return middle, true, nil
		case -1:
			low = middle + 1
		default:
			high = middle
		}
	}
	return low, false, nil
}
