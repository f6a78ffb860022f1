package tree

import (
	"encoding/binary"
	"fmt"
	"io"

	"example.com/admit/storage/volume/damage"
)

// maxProblems bounds what Check reports: a file with that many is not mended by reading on.
const maxProblems = 100

// Check walks the structure of a file nobody writes: every page of the tree is sound and reached once, and every other page is on the
// free list, once. Values are skipped, so a file of large values is checked by reading a small part of it. It returns what is wrong,
// at most the first hundred findings, or nil.
//
// The free list matters as much as the tree: bbolt overwrites the pages it names.
func Check(file io.ReaderAt, meta Meta) []error {
	c := &checker{file: file, meta: meta, used: make([]bool, meta.HighWater)}
	c.used[0], c.used[1] = true, true
	c.walk(meta.Root, nil, 0)
	c.freelist()
	return c.problems
}

type checker struct {
	file     io.ReaderAt
	meta     Meta
	used     []bool // reached so far: by the tree, the free list itself, or its entries
	problems []error
}

func (c *checker) report(err error) bool {
	if err != nil && len(c.problems) < maxProblems {
		c.problems = append(c.problems, err)
	}
	return err != nil
}

// claim marks pages as reached and says whether they were free to be.
func (c *checker) claim(id, count uint64) bool {
	for i := id; i < id+count; i++ {
		if c.used[i] {
			c.report(damage.OnPage(i, "reached twice"))
			return false
		}
		c.used[i] = true
	}
	return true
}

// walk checks the page and all below it. key is what the parent knows it by, nil at the root of a bucket.
func (c *checker) walk(id uint64, key []byte, depth int) {
	p, err := c.load(id)
	if c.report(err) {
		return
	}
	if !c.claim(id, uint64(p.size/PageSize)) {
		return
	}
	if depth > maxDepth {
		c.report(damage.OnPage(id, "more than %d levels of pages", maxDepth))
		return
	}
	if key != nil && c.report(checkChild(p, key)) {
		return
	}
	for i := range p.count {
		e, _, err := p.element(i)
		if c.report(err) {
			return
		}
		switch {
		case !p.leaf:
			c.walk(e.child, e.key, depth+1)
		case e.bucket:
			value, err := p.bytes(e.valueAt, e.valueSize)
			if c.report(err) {
				continue
			}
			root, _, err := parseBucket(value, id)
			if !c.report(err) && root != 0 {
				c.walk(root, nil, depth+1)
			}
		}
	}
}

// load reads one tree page, of a long one only the parts that hold the table and the keys.
func (c *checker) load(id uint64) (*page, error) {
	buf, pages, err := c.head(id)
	if err != nil {
		return nil, err
	}
	p := &page{buf: buf, size: int(pages) * PageSize}
	p.fetch = func(offset, n int) ([]byte, error) {
		part := make([]byte, n)
		if _, err := c.file.ReadAt(part, int64(id)*PageSize+int64(offset)); err != nil {
			return nil, fmt.Errorf("read page %d: %w", id, err)
		}
		return part, nil
	}
	return p, parsePage(p, id)
}

// head reads the first page of a run and returns how many pages the run has.
func (c *checker) head(id uint64) ([]byte, uint64, error) {
	if id < 2 || id >= c.meta.HighWater {
		return nil, 0, damage.OnPage(id, "referred to, but outside 2..%d", c.meta.HighWater-1)
	}
	buf := make([]byte, PageSize)
	if err := (FileSource{c.file}).ReadPages(id, buf); err != nil {
		return nil, 0, err
	}
	if own := binary.LittleEndian.Uint64(buf); own != id {
		return nil, 0, damage.OnPage(id, "the page says it is page %d", own)
	}
	pages := uint64(binary.LittleEndian.Uint32(buf[12:])) + 1
	if id+pages > c.meta.HighWater {
		return nil, 0, damage.OnPage(id, "%d overflow pages reach beyond page %d", pages-1, c.meta.HighWater-1)
	}
	return buf, pages, nil
}

// freelist checks that the free list and the tree together are all pages, each once.
func (c *checker) freelist() {
	ids, err := c.freePages()
	if c.report(err) {
		return
	}
	for i, id := range ids {
		switch {
		case id < 2 || id >= c.meta.HighWater:
			c.report(damage.OnPage(c.meta.Freelist, "free page %d is outside 2..%d", id, c.meta.HighWater-1))
		case i > 0 && id <= ids[i-1]:
			c.report(damage.OnPage(c.meta.Freelist, "free pages do not ascend at %d", id))
		case c.used[id]:
			c.report(damage.OnPage(id, "in use and on the free list"))
		default:
			c.used[id] = true
		}
	}
	for id, used := range c.used {
		if !used {
			c.report(damage.OnPage(uint64(id), "neither in use nor on the free list"))
		}
	}
}

func (c *checker) freePages() ([]uint64, error) {
	id := c.meta.Freelist
	head, pages, err := c.head(id)
	if err != nil {
		return nil, err
	}
	if kind := binary.LittleEndian.Uint16(head[8:]); kind != kindFreelist {
		return nil, damage.OnPage(id, "kind %#x is not a free list", kind)
	}
	if !c.claim(id, pages) {
		return nil, nil
	}
	buf := make([]byte, pages*PageSize)
	if err := (FileSource{c.file}).ReadPages(id, buf); err != nil {
		return nil, err
	}
	count, list := uint64(binary.LittleEndian.Uint16(buf[10:])), buf[headerSize:]
	if count == 0xFFFF { // too many for the header: the first entry is the count
		count, list = binary.LittleEndian.Uint64(list), list[8:]
	}
	if count > uint64(len(list)/8) {
		return nil, damage.OnPage(id, "%d free pages do not fit the list", count)
	}
	ids := make([]uint64, count)
	for i := range ids {
		ids[i] = binary.LittleEndian.Uint64(list[8*i:])
	}
	return ids, nil
}
