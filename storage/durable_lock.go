package storage

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"time"

	"golang.org/x/sys/unix"
)

const (
	lockName  = "lock"
	lockWait  = 2 * time.Second
	lockPause = 50 * time.Millisecond
)

// lockFolder makes sure that one process, and one writer in it, has the store. The lock lives with the open file: it goes with the process,
// however that ends, so a lock file left behind means nothing. A second opener gets ErrInUse within lockWait.
func lockFolder(folder string) (*os.File, error) {
	path := filepath.Join(folder, lockName)
	file, err := os.OpenFile(path, os.O_RDWR|os.O_CREATE, 0o640)
	if err != nil {
		return nil, err
	}
	// A short wait bridges a predecessor that is just closing.
	deadline := time.Now().Add(lockWait)
	for {
		err := unix.Flock(int(file.Fd()), unix.LOCK_EX|unix.LOCK_NB)
		switch {
		case err == nil:
			return file, nil
		case errors.Is(err, unix.EINTR):
			continue
		case !errors.Is(err, unix.EWOULDBLOCK):
			return nil, errors.Join(fmt.Errorf("lock %s: %w", path, err), file.Close())
		case time.Now().After(deadline):
			return nil, errors.Join(fmt.Errorf("%s: %w", folder, ErrInUse), file.Close())
		}
		time.Sleep(lockPause)
	}
}
