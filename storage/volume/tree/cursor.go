package tree

import (
	"bytes"

	"example.com/admit/storage/volume/damage"
)

// maxDepth bounds every walk. Twelve levels of the poorest branch pages (two children) would already hold more than fits a file; real
// files have three or four.
const maxDepth = 32

// Cursor walks the entries of a bucket in key order. A nil key says that there are no more. After an error the cursor is done.
type Cursor struct {
	bucket *Bucket
	stack  []frame
}

type frame struct {
	page  *page
	index int
}

// Cursor returns a cursor that stands nowhere yet.
func (b *Bucket) Cursor() *Cursor { return &Cursor{bucket: b} }

// Seek moves to key, or to the first key after it.
func (c *Cursor) Seek(key []byte) ([]byte, []byte, error) {
	k, v, err := c.seek(key)
	if err == nil && k != nil && c.onBucket() {
		return nil, nil, damage.OnPage(c.top().page.id, "key %x holds a bucket, not a value", k)
	}
	return k, v, err
}

func (c *Cursor) seek(key []byte) ([]byte, []byte, error) {
	if err := c.enter(); err != nil {
		return nil, nil, err
	}
	for !c.top().page.leaf {
		at, exact, err := c.top().page.find(key)
		if err != nil {
			return nil, nil, err
		}
		// A branch key is the first key below it: what is sought lies under the last key that is not above it.
		if !exact && at > 0 {
			at--
		}
		c.top().index = at
		if err := c.descend(); err != nil {
			return nil, nil, err
		}
	}
	at, _, err := c.top().page.find(key)
	if err != nil {
		return nil, nil, err
	}
	c.top().index = at
	if at < c.top().page.count {
		return c.current()
	}
	// Behind the last key of this leaf: the answer is the first key of the next one, and looking there also proves that the branch page
	// did not send us astray.
	return c.step(+1)
}

// First moves to the first entry.
func (c *Cursor) First() ([]byte, []byte, error) { return c.edge(+1) }

// Last moves to the last entry.
func (c *Cursor) Last() ([]byte, []byte, error) { return c.edge(-1) }

func (c *Cursor) edge(direction int) ([]byte, []byte, error) {
	if err := c.enter(); err != nil {
		return nil, nil, err
	}
	if err := c.toLeaf(direction); err != nil {
		return nil, nil, err
	}
	if c.top().page.count == 0 {
		return nil, nil, nil
	}
	return c.current()
}

// Next moves to the following entry.
func (c *Cursor) Next() ([]byte, []byte, error) { return c.step(+1) }

// Prev moves to the preceding entry. After a Seek that found no key it moves to the last entry.
func (c *Cursor) Prev() ([]byte, []byte, error) { return c.step(-1) }

func (c *Cursor) top() *frame { return &c.stack[len(c.stack)-1] }

func (c *Cursor) onBucket() bool {
	e, _, err := c.top().page.element(c.top().index)
	return err == nil && e.bucket
}

// enter puts the root page of the bucket on an empty stack.
func (c *Cursor) enter() error {
	c.stack = c.stack[:0]
	root := c.bucket.inline
	if root == nil {
		var err error
		if root, err = c.bucket.reader.load(c.bucket.root); err != nil {
			return err
		}
	}
	c.stack = append(c.stack, frame{page: root})
	return nil
}

// descend goes one level down, to the child the top frame points at.
func (c *Cursor) descend() error {
	if len(c.stack) >= maxDepth {
		return damage.OnPage(c.top().page.id, "more than %d levels of pages", maxDepth)
	}
	parent := c.top()
	link, _, err := parent.page.element(parent.index)
	if err != nil {
		return err
	}
	child, err := c.bucket.reader.load(link.child)
	if err != nil {
		return err
	}
	if err := checkChild(child, link.key); err != nil {
		return err
	}
	c.stack = append(c.stack, frame{page: child})
	return nil
}

// checkChild holds the first key of a page against the key its parent knows it by.
func checkChild(child *page, key []byte) error {
	if child.count == 0 {
		return damage.OnPage(child.id, "a page below another is empty")
	}
	first, _, err := child.element(0)
	if err != nil {
		return err
	}
	if !bytes.Equal(first.key, key) {
		return damage.OnPage(child.id, "first key %x, but its parent leads here for %x", first.key, key)
	}
	return nil
}

// toLeaf descends to the leaf at one edge of what is below the top frame, and points at the entry of that edge.
func (c *Cursor) toLeaf(direction int) error {
	for {
		f := c.top()
		f.index = 0
		if direction < 0 && f.page.count > 0 {
			f.index = f.page.count - 1
		}
		if f.page.leaf {
			return nil
		}
		if err := c.descend(); err != nil {
			return err
		}
	}
}

// step moves one entry forward or back, over page boundaries.
func (c *Cursor) step(direction int) ([]byte, []byte, error) {
	level := len(c.stack) - 1
	for ; level >= 0; level-- {
		f := &c.stack[level]
		if next := f.index + direction; next >= 0 && next < f.page.count {
			f.index = next
			break
		}
	}
	if level < 0 {
		// Stay beyond the edge, so that a step the other way comes back.
		c.park(direction)
		return nil, nil, nil
	}
	c.stack = c.stack[:level+1]
	if !c.top().page.leaf {
		if err := c.descend(); err != nil {
			return nil, nil, err
		}
		if err := c.toLeaf(direction); err != nil {
			return nil, nil, err
		}
	}
	return c.current()
}

// park leaves the cursor before the first or behind the last entry of the leaf it stands on.
func (c *Cursor) park(direction int) {
	if len(c.stack) == 0 {
		return
	}
	f := c.top()
	if direction > 0 {
		f.index = f.page.count
	} else {
		f.index = -1
	}
}

func (c *Cursor) current() ([]byte, []byte, error) {
	f := c.top()
	e, _, err := f.page.element(f.index)
	if err != nil {
		return nil, nil, err
	}
	value, err := f.page.bytes(e.valueAt, e.valueSize)
	return e.key, value, err
}
