package disktest

import (
	"errors"
	"fmt"
	"os"
	"sync"

	"example.com/admit/storage/volume/disk"
)

// ErrInjected is what a Faulty file system fails with.
var ErrInjected = errors.New("injected failure")

// Faulty passes calls on until the FailAt-th (counted from 0) that may change the disk, which it does not perform. Every later one
// fails as well while Sticky is set.
type Faulty struct {
	Files  disk.FileSystem
	FailAt int
	Sticky bool
	// Err is what to fail with. Default ErrInjected.
	Err error

	mu    sync.Mutex
	calls int
}

// Calls returns how many calls were counted.
func (f *Faulty) Calls() int {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.calls
}

func (f *Faulty) fail(what string) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	call := f.calls
	f.calls++
	if call != f.FailAt && (!f.Sticky || call < f.FailAt) {
		return nil
	}
	err := f.Err
	if err == nil {
		err = ErrInjected
	}
	return fmt.Errorf("%s: %w", what, err)
}

// OpenFile implements disk.FileSystem.
func (f *Faulty) OpenFile(name string, flag int, perm os.FileMode) (disk.File, error) {
	if flag&(os.O_CREATE|os.O_TRUNC) != 0 {
		if err := f.fail("create " + name); err != nil {
			return nil, err
		}
	}
	file, err := f.Files.OpenFile(name, flag, perm)
	if err != nil {
		return nil, err
	}
	return &faultyFile{File: file, owner: f}, nil
}

// Rename implements disk.FileSystem.
func (f *Faulty) Rename(oldName, newName string) error {
	if err := f.fail("rename " + oldName); err != nil {
		return err
	}
	return f.Files.Rename(oldName, newName)
}

// Remove implements disk.FileSystem; it never fails by itself: it is what follows a failure.
func (f *Faulty) Remove(name string) error { return f.Files.Remove(name) }

// SyncFolder implements disk.FileSystem.
func (f *Faulty) SyncFolder(name string) error {
	if err := f.fail("sync folder " + name); err != nil {
		return err
	}
	return f.Files.SyncFolder(name)
}

type faultyFile struct {
	disk.File
	owner *Faulty
}

func (f *faultyFile) WriteAt(p []byte, at int64) (int, error) {
	if err := f.owner.fail("write"); err != nil {
		return 0, err
	}
	return f.File.WriteAt(p, at)
}

func (f *faultyFile) Sync() error {
	if err := f.owner.fail("sync"); err != nil {
		return err
	}
	return f.File.Sync()
}

func (f *faultyFile) SyncContent() error {
	if err := f.owner.fail("sync content"); err != nil {
		return err
	}
	return f.File.SyncContent()
}
