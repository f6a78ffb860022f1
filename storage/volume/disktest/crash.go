// Package disktest offers file systems for tests: one that lives in memory and can lose power, and one whose calls fail on demand.
package disktest

import (
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"sync"

	"example.com/admit/storage/volume/disk"
)

// sector is the piece in which a write reaches the disk or does not.
const sector = 512

// Crashable is a file system in memory that knows what was synced. Crash shows what a power cut would have left.
type Crashable struct {
	mu      sync.Mutex
	names   map[string]*inode // as programs see it
	durable map[string]*inode // as of the last sync of the folder
	changes []change          // of names, not yet durable, in order
}

type change struct {
	folder string
	apply  func(names map[string]*inode)
}

// inode is the content of a file: what is certain, and the writes on top of it that are not.
type inode struct {
	synced  []byte
	current []byte
	writes  []write
}

type write struct {
	at   int64
	data []byte // nil: the file was cut to length at
}

// NewCrashable returns an empty file system.
func NewCrashable() *Crashable {
	return &Crashable{names: make(map[string]*inode), durable: make(map[string]*inode)}
}

// OpenFile implements disk.FileSystem.
func (c *Crashable) OpenFile(name string, flag int, _ os.FileMode) (disk.File, error) {
	c.mu.Lock()
	defer c.mu.Unlock()
	node, found := c.names[name]
	switch {
	case !found && flag&os.O_CREATE == 0:
		return nil, &os.PathError{Op: "open", Path: name, Err: os.ErrNotExist}
	case found && flag&os.O_EXCL != 0:
		return nil, &os.PathError{Op: "open", Path: name, Err: os.ErrExist}
	case !found:
		node = &inode{}
		c.rename(name, func(names map[string]*inode) { names[name] = node })
	}
	if flag&os.O_TRUNC != 0 && len(node.current) > 0 {
		node.current = nil
		node.writes = append(node.writes, write{})
	}
	return &memoryFile{owner: c, node: node, name: name}, nil
}

func (c *Crashable) rename(name string, apply func(map[string]*inode)) {
	apply(c.names)
	c.changes = append(c.changes, change{folder: filepath.Dir(name), apply: apply})
}

// Rename implements disk.FileSystem.
func (c *Crashable) Rename(oldName, newName string) error {
	c.mu.Lock()
	defer c.mu.Unlock()
	node, found := c.names[oldName]
	if !found {
		return &os.PathError{Op: "rename", Path: oldName, Err: os.ErrNotExist}
	}
	c.rename(newName, func(names map[string]*inode) {
		delete(names, oldName)
		names[newName] = node
	})
	return nil
}

// Remove implements disk.FileSystem.
func (c *Crashable) Remove(name string) error {
	c.mu.Lock()
	defer c.mu.Unlock()
	if _, found := c.names[name]; !found {
		return &os.PathError{Op: "remove", Path: name, Err: os.ErrNotExist}
	}
	c.rename(name, func(names map[string]*inode) { delete(names, name) })
	return nil
}

// SyncFolder implements disk.FileSystem.
func (c *Crashable) SyncFolder(name string) error {
	c.mu.Lock()
	defer c.mu.Unlock()
	var rest []change
	for _, ch := range c.changes {
		if ch.folder == filepath.Clean(name) {
			ch.apply(c.durable)
		} else {
			rest = append(rest, ch)
		}
	}
	c.changes = rest
	return nil
}

// Crash returns the file system as a power cut at this moment may leave it: every unsynced sector is kept with the given probability, and of
// the unsynced changes of names a random number of the first ones. The receiver is not changed, so one run can crash many ways.
func (c *Crashable) Crash(random *rand.Rand, keep float64) *Crashable {
	c.mu.Lock()
	defer c.mu.Unlock()
	after := NewCrashable()
	names := make(map[string]*inode, len(c.durable))
	for name, node := range c.durable {
		names[name] = node
	}
	kept := 0
	for kept < len(c.changes) && random.Float64() < keep {
		kept++
	}
	for _, ch := range c.changes[:kept] {
		ch.apply(names)
	}
	survivors := make(map[*inode]*inode)
	for name, node := range names {
		if survivors[node] == nil {
			content := node.crash(random, keep)
			survivors[node] = &inode{synced: content, current: append([]byte{}, content...)}
		}
		after.names[name], after.durable[name] = survivors[node], survivors[node]
	}
	return after
}

func (n *inode) crash(random *rand.Rand, keep float64) []byte {
	content := append([]byte{}, n.synced...)
	for _, w := range n.writes {
		if w.data == nil {
			if random.Float64() < keep {
				content = content[:min(int64(len(content)), w.at)]
			}
			continue
		}
		for from := int64(0); from < int64(len(w.data)); {
			// Sectors lie where the disk has them, not where the write began.
			to := min(int64(len(w.data)), from+sector-(w.at+from)%sector)
			if random.Float64() < keep {
				content = place(content, w.at+from, w.data[from:to])
			}
			from = to
		}
	}
	return content
}

func place(content []byte, at int64, data []byte) []byte {
	if missing := at + int64(len(data)) - int64(len(content)); missing > 0 {
		content = append(content, make([]byte, missing)...)
	}
	copy(content[at:], data)
	return content
}

type memoryFile struct {
	owner *Crashable
	node  *inode
	name  string
}

func (f *memoryFile) ReadAt(p []byte, at int64) (int, error) {
	f.owner.mu.Lock()
	defer f.owner.mu.Unlock()
	if at >= int64(len(f.node.current)) {
		return 0, io.EOF
	}
	n := copy(p, f.node.current[at:])
	if n < len(p) {
		return n, io.EOF
	}
	return n, nil
}

func (f *memoryFile) WriteAt(p []byte, at int64) (int, error) {
	f.owner.mu.Lock()
	defer f.owner.mu.Unlock()
	data := append([]byte{}, p...)
	f.node.current = place(f.node.current, at, data)
	f.node.writes = append(f.node.writes, write{at: at, data: data})
	return len(p), nil
}

func (f *memoryFile) Size() (int64, error) {
	f.owner.mu.Lock()
	defer f.owner.mu.Unlock()
	return int64(len(f.node.current)), nil
}

func (f *memoryFile) Sync() error {
	f.owner.mu.Lock()
	defer f.owner.mu.Unlock()
	f.node.synced = append([]byte{}, f.node.current...)
	f.node.writes = nil
	return nil
}

func (f *memoryFile) SyncContent() error { return f.Sync() }

func (f *memoryFile) Close() error { return nil }
