package tree

import (
	"encoding/binary"
	"fmt"
	"io"

	"example.com/admit/storage/volume/damage"
)

// Source delivers pages. It may know more about them than the tree does, such as a checksum of each, and refuse one by an error.
type Source interface {
	// ReadPages fills buf, a whole number of pages long, from page id on.
	ReadPages(id uint64, buf []byte) error
}

// FileSource reads pages of a file.
type FileSource struct{ File io.ReaderAt }

// ReadPages implements Source. A file that ends before the page does is damage.
func (s FileSource) ReadPages(id uint64, buf []byte) error {
	if _, err := s.File.ReadAt(buf, int64(id)*PageSize); err != nil {
		if err == io.EOF {
			return damage.OnPage(id, "the file ends before this page")
		}
		return fmt.Errorf("read page %d: %w", id, err)
	}
	return nil
}

// Reader reads one state of a file: the tree below a root page. The state must not change under it, which is the caller's part (an open
// bbolt read transaction, or a file nobody writes). Slices it returns are the caller's own.
type Reader struct {
	source    Source
	root      uint64
	highWater uint64
}

// NewReader returns a reader of the tree below page root, with highWater the first page not in use.
func NewReader(source Source, root, highWater uint64) *Reader {
	return &Reader{source: source, root: root, highWater: highWater}
}

// load reads and checks one tree page.
func (r *Reader) load(id uint64) (*page, error) {
	if id < 2 || id >= r.highWater {
		return nil, damage.OnPage(id, "referred to, but outside 2..%d", r.highWater-1)
	}
	buf := make([]byte, PageSize)
	if err := r.source.ReadPages(id, buf); err != nil {
		return nil, err
	}
	if overflow := uint64(binary.LittleEndian.Uint32(buf[12:])); overflow > 0 {
		// The id is judged first: of a page that is not the one asked for, the overflow says nothing.
		if own := binary.LittleEndian.Uint64(buf); own != id {
			return nil, damage.OnPage(id, "the page says it is page %d", own)
		}
		if id+overflow >= r.highWater {
			return nil, damage.OnPage(id, "%d overflow pages reach beyond page %d", overflow, r.highWater-1)
		}
		whole := make([]byte, (overflow+1)*PageSize)
		copy(whole, buf)
		if err := r.source.ReadPages(id+1, whole[PageSize:]); err != nil {
			return nil, err
		}
		buf = whole
	}
	p := &page{buf: buf, size: len(buf)}
	return p, parsePage(p, id)
}

// Bucket is one top-level bucket.
type Bucket struct {
	reader *Reader
	name   string
	root   uint64
	inline *page
}

// Bucket finds a bucket by name; false says that there is none.
func (r *Reader) Bucket(name string) (*Bucket, bool, error) {
	top := &Bucket{reader: r, root: r.root}
	cursor := top.Cursor()
	key, value, err := cursor.seek([]byte(name))
	if err != nil || string(key) != name {
		return nil, false, err
	}
	if !cursor.onBucket() {
		return nil, false, damage.OnPage(r.root, "%q is a value, not a bucket", name)
	}
	root, inline, err := parseBucket(value, r.root)
	if err != nil {
		return nil, false, err
	}
	return &Bucket{reader: r, name: name, root: root, inline: inline}, true, nil
}

// parseBucket decodes the value of a bucket entry found on page id.
func parseBucket(value []byte, id uint64) (root uint64, inline *page, err error) {
	if len(value) < 16 {
		return 0, nil, damage.OnPage(id, "bucket entry of %d bytes", len(value))
	}
	root = binary.LittleEndian.Uint64(value)
	if root != 0 {
		if len(value) != 16 {
			return 0, nil, damage.OnPage(id, "bucket entry has a root page and an inline page")
		}
		return root, nil, nil
	}
	body := value[16:]
	if len(body) < headerSize {
		return 0, nil, damage.OnPage(id, "inline bucket of %d bytes", len(body))
	}
	p := &page{buf: body, size: len(body)}
	if err := parsePage(p, 0); err != nil {
		return 0, nil, &damage.Error{Page: id, HasPage: true, Problem: "inline bucket", Cause: err}
	}
	// An inline page is exactly as long as its elements: a count that was flipped to zero leaves a rest.
	end := headerSize
	if p.count > 0 {
		last, _, err := p.element(p.count - 1)
		if err != nil {
			return 0, nil, err
		}
		end = last.valueAt + last.valueSize
	}
	if end != len(body) || !p.leaf {
		return 0, nil, damage.OnPage(id, "inline bucket of %d bytes describes %d", len(body), end)
	}
	return 0, p, nil
}

// Get returns the value under key; nil says that the key is absent.
func (b *Bucket) Get(key []byte) ([]byte, error) {
	found, value, err := b.Cursor().Seek(key)
	if err != nil || string(found) != string(key) {
		return nil, err
	}
	return value, nil
}
