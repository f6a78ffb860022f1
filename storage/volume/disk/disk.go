// Package disk is the thin layer between the store and the file system, for the files of the store's own formats: the mark, the
// page checksums, the filters. It exists so that power cuts and failing calls can be tried on them (package disktest), and so that
// the one safe way to make a file appear, write aside, sync, rename, sync the folder, is written once.
//
// The bbolt files of a volume do not pass through it: bbolt opens its own files.
package disk

import (
	"bufio"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"syscall"
)

// ErrFull says that the disk, a quota or the process's file size limit left no room. Nothing was stored; the same call may succeed
// once there is room again.
var ErrFull = errors.New("no room left to store")

// File is an open file.
type File interface {
	io.ReaderAt
	io.WriterAt
	io.Closer
	// Size returns the length in bytes.
	Size() (int64, error)
	// Sync makes content and length durable.
	Sync() error
	// SyncContent makes content durable, and the length only where it changed (fdatasync).
	SyncContent() error
}

// FileSystem is what the store needs of a file system.
type FileSystem interface {
	// OpenFile takes the flags of package os.
	OpenFile(name string, flag int, perm os.FileMode) (File, error)
	// Rename replaces newName atomically; it is durable only after SyncFolder.
	Rename(oldName, newName string) error
	// Remove deletes a file.
	Remove(name string) error
	// SyncFolder makes the names in a folder durable.
	SyncFolder(name string) error
}

// OS returns the operating system's file system.
func OS() FileSystem { return osFiles{} }

type osFiles struct{}

func (osFiles) OpenFile(name string, flag int, perm os.FileMode) (File, error) {
	f, err := os.OpenFile(name, flag, perm)
	if err != nil {
		return nil, err
	}
	return osFile{f}, nil
}

func (osFiles) Rename(oldName, newName string) error { return os.Rename(oldName, newName) }

func (osFiles) Remove(name string) error { return os.Remove(name) }

func (osFiles) SyncFolder(name string) error {
	folder, err := os.Open(name)
	if err != nil {
		return err
	}
	return errors.Join(folder.Sync(), folder.Close())
}

type osFile struct{ *os.File }

func (f osFile) Size() (int64, error) {
	info, err := f.Stat()
	if err != nil {
		return 0, err
	}
	return info.Size(), nil
}

func (f osFile) SyncContent() error { return syncContent(f.File) }

// Replace makes the file at path hold what write writes, or leaves the old file as it was: content goes to a file beside it, which is
// synced, renamed over path, and the folder synced (a rename is durable only then). After an error the new content may still appear
// at path, whole, when only the last sync of the folder failed; it is never there in part.
func Replace(files FileSystem, path string, write func(w io.Writer) error) error {
	aside := path + ".new"
	if err := writeWhole(files, aside, write); err != nil {
		return errors.Join(Classify(err), ignoreMissing(files.Remove(aside)))
	}
	if err := files.Rename(aside, path); err != nil {
		return errors.Join(Classify(err), ignoreMissing(files.Remove(aside)))
	}
	if err := files.SyncFolder(filepath.Dir(path)); err != nil {
		return Classify(fmt.Errorf("sync folder of %s: %w", path, err))
	}
	return nil
}

func writeWhole(files FileSystem, path string, write func(w io.Writer) error) (err error) {
	f, err := files.OpenFile(path, os.O_RDWR|os.O_CREATE|os.O_TRUNC, 0o640)
	if err != nil {
		return err
	}
	// A close error after a good sync loses nothing, but an unclosed file would leak: report whichever came first.
	defer func() { err = errors.Join(err, f.Close()) }()
	w := bufio.NewWriterSize(&sequential{file: f}, 1<<16)
	if err := write(w); err != nil {
		return err
	}
	if err := w.Flush(); err != nil {
		return err
	}
	return f.Sync()
}

// sequential turns WriteAt into Write.
type sequential struct {
	file   File
	offset int64
}

func (s *sequential) Write(p []byte) (int, error) {
	n, err := s.file.WriteAt(p, s.offset)
	s.offset += int64(n)
	return n, err
}

func ignoreMissing(err error) error {
	if errors.Is(err, os.ErrNotExist) {
		return nil
	}
	return err
}

// Classify makes an error that comes of missing room match ErrFull; other errors, and nil, come back unchanged.
func Classify(err error) error {
	if err == nil || errors.Is(err, ErrFull) {
		return err
	}
	for _, number := range []syscall.Errno{syscall.ENOSPC, syscall.EFBIG, syscall.EDQUOT} {
		if errors.Is(err, number) {
			return fmt.Errorf("%w: %w", ErrFull, err)
		}
	}
	return err
}
