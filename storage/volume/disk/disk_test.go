package disk_test

import (
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/disktest"
)

func write(text string) func(io.Writer) error {
	return func(w io.Writer) error {
		_, err := io.WriteString(w, text)
		return err
	}
}

func read(files disk.FileSystem, path string) (string, error) {
	f, err := files.OpenFile(path, os.O_RDONLY, 0)
	if err != nil {
		return "", err
	}
	defer f.Close()
	size, err := f.Size()
	if err != nil {
		return "", err
	}
	content := make([]byte, size)
	if _, err := f.ReadAt(content, 0); err != nil && err != io.EOF {
		return "", err
	}
	return string(content), nil
}

var (
	before = strings.Repeat("before ", 1000)
	after  = strings.Repeat("after ", 20000)
)

// TestReplaceSurvivesPowerCut cuts the power after each call of a replacement, keeping 0, 30, 70 or 100 % of what was not synced: the file
// is the old or the new one, whole, and the new one once Replace has returned.
func TestReplaceSurvivesPowerCut(t *testing.T) {
	seeds := 1000
	if testing.Short() {
		seeds = 200
	}
	for seed := range seeds {
		random := rand.New(rand.NewPCG(uint64(seed), 0))
		keep := []float64{0, 0.3, 0.7, 1}[seed%4]
		memory := disktest.NewCrashable()
		if err := disk.Replace(memory, "dir/file", write(before)); err != nil {
			t.Fatal(err)
		}
		// Everything after the chosen call fails: the state then is the state at that moment.
		cut := random.IntN(10)
		err := disk.Replace(&disktest.Faulty{Files: memory, FailAt: cut, Sticky: true}, "dir/file", write(after))
		left := memory.Crash(random, keep)
		got, readErr := read(left, "dir/file")
		switch {
		case readErr != nil:
			t.Errorf("seed %d: %v", seed, readErr)
		case got != before && got != after:
			t.Errorf("seed %d, cut after %d calls: %d bytes that are neither", seed, cut, len(got))
		case err == nil && got != after:
			t.Errorf("seed %d: replaced, but after the power cut the old content is back", seed)
		}
	}
}

// TestReplaceFails makes each call fail in turn, on a real file system: error said or work done, and nothing left lying about.
func TestReplaceFails(t *testing.T) {
	for failAt := 0; ; failAt++ {
		folder := t.TempDir()
		path := filepath.Join(folder, "file")
		if err := disk.Replace(disk.OS(), path, write(before)); err != nil {
			t.Fatal(err)
		}
		faulty := &disktest.Faulty{Files: disk.OS(), FailAt: failAt, Err: syscall.ENOSPC}
		err := disk.Replace(faulty, path, write(after))
		got, readErr := read(disk.OS(), path)
		if readErr != nil || got != before && got != after {
			t.Errorf("call %d failed: %d bytes, %v", failAt, len(got), readErr)
		}
		entries, dirErr := os.ReadDir(folder)
		if dirErr != nil || len(entries) != 1 {
			t.Errorf("call %d failed: %v left in the folder (%v)", failAt, entries, dirErr)
		}
		if faulty.Calls() <= failAt {
			if err != nil || got != after || failAt < 5 {
				t.Errorf("%d calls, none failed: %v", failAt, err)
			}
			return
		}
		if !errors.Is(err, disk.ErrFull) {
			t.Errorf("call %d found no room: %v", failAt, err)
		}
	}
}

func TestClassify(t *testing.T) {
	for _, c := range []struct {
		err  error
		full bool
	}{
		{nil, false},
		{io.EOF, false},
		{syscall.EIO, false},
		{syscall.ENOSPC, true},
		{fmt.Errorf("write: %w", &os.PathError{Op: "write", Path: "x", Err: syscall.EFBIG}), true},
		{syscall.EDQUOT, true},
	} {
		got := disk.Classify(c.err)
		if errors.Is(got, disk.ErrFull) != c.full || !errors.Is(got, c.err) {
			t.Errorf("%v became %v", c.err, got)
		}
	}
}
