package disk

import (
	"os"

	"golang.org/x/sys/unix"
)

// syncContent skips the times of the file, which fsync would write as well.
func syncContent(f *os.File) error { return unix.Fdatasync(int(f.Fd())) }

// Forget drops the clean pages of a file from the page cache, so that what is read next comes from the disk itself: after a failed
// sync the cache may hold what the disk does not.
func Forget(f *os.File) error {
	return unix.Fadvise(int(f.Fd()), 0, 0, unix.FADV_DONTNEED)
}
