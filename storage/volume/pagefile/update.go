package pagefile

import (
	"errors"
	"fmt"
	"os"
	"runtime/debug"
	"syscall"

	"go.etcd.io/bbolt"
	bolterrors "go.etcd.io/bbolt/errors"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/tree"
)

// Update runs change in a write transaction and commits it: after a nil error it is on disk. An error of change itself comes back as it
// is, with nothing written. A commit that found no room is disk.ErrFull: nothing was written, and a later Update may succeed. After any
// other failed commit the file is in doubt: this and every later Update returns ErrFailed.
func (f *File) Update(change func(tx *bbolt.Tx) error) (err error) {
	if err := f.usable(); err != nil {
		return err
	}
	tx, err := f.db.Begin(true)
	if err != nil {
		return fmt.Errorf("%s: %w", f.path, err)
	}
	// A page that was damaged after the check at open can still make bbolt panic or fault. The process goes on, the file does not.
	defer debug.SetPanicOnFault(debug.SetPanicOnFault(true))
	defer func() {
		if r := recover(); r != nil {
			stuck := !releases(tx)
			err = f.fail(damage.InFile(f.path, "bbolt met damage while writing: %v", r), stuck)
		}
	}()
	if err := change(tx); err != nil {
		// The error of the change is the one to report; a rollback only frees memory.
		_ = tx.Rollback()
		return err
	}
	id := tx.ID()
	if err := tx.Commit(); err != nil {
		return f.commitFailed(err, id)
	}
	return f.committed()
}

func (f *File) usable() error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.failure != nil {
		return fmt.Errorf("%s: %w: %w", f.path, ErrFailed, f.failure)
	}
	return nil
}

func (f *File) fail(cause error, stuck bool) error {
	f.mu.Lock()
	f.failure, f.stuck = cause, stuck
	f.mu.Unlock()
	return fmt.Errorf("%s: %w: %w", f.path, ErrFailed, cause)
}

// releases rolls a transaction back after a panic and says whether bbolt gave its locks back.
func releases(tx *bbolt.Tx) (ok bool) {
	defer func() {
		if recover() != nil {
			ok = false
		}
	}()
	err := tx.Rollback()
	return err == nil || errors.Is(err, bolterrors.ErrTxClosed)
}

// committed notes how far the file is in use.
func (f *File) committed() error {
	tx, err := f.db.Begin(false)
	if err != nil {
		return fmt.Errorf("%s: %w", f.path, err)
	}
	size := tx.Size()
	_ = tx.Rollback()
	f.mu.Lock()
	defer f.mu.Unlock()
	f.highWater = uint64(size) / tree.PageSize
	return nil
}

// commitFailed decides what a failed commit means. When the disk is merely full, and the meta page of the transaction was not written,
// the file is as it was. A failed sync proves nothing about the disk: the kernel may report it once and then forget.
func (f *File) commitFailed(err error, id int) error {
	err = disk.Classify(err)
	if !errors.Is(err, disk.ErrFull) && f.hidesErrno(err) {
		err = fmt.Errorf("%w: %w", disk.ErrFull, err)
	}
	if errors.Is(err, disk.ErrFull) {
		tx, beginErr := f.db.Begin(false)
		if beginErr == nil {
			current := tx.ID()
			_ = tx.Rollback()
			if current < id {
				return fmt.Errorf("%s: %w", f.path, err)
			}
		}
	}
	return f.fail(err, false)
}

// hidesErrno finds out whether a commit failed for want of room when its error does not say: bbolt drops the number of a failed resize.
// The same resize, tried here, tells.
func (f *File) hidesErrno(err error) bool {
	var number syscall.Errno
	if errors.As(err, &number) {
		return false
	}
	file, openErr := os.OpenFile(f.path, os.O_RDWR, 0)
	if openErr != nil {
		return false
	}
	defer file.Close()
	info, statErr := file.Stat()
	if statErr != nil {
		return false
	}
	resizeErr := file.Truncate(info.Size() + 2*f.options.GrowBytes)
	if resizeErr == nil {
		// There is room after all, so room was not the reason. Give it back; that this may fail changes nothing.
		_ = file.Truncate(info.Size())
	}
	return errors.Is(disk.Classify(resizeErr), disk.ErrFull)
}
