package storage

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"sync"
	"testing"

	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/disktest"
)

// TestFailedSyncEndsAcknowledging makes one call on the store's own files (the mark, above all) fail at fifty different places. From then on
// nothing is acknowledged until Reopen; after it, everything acknowledged is there once, and everything else whole or absent.
func TestFailedSyncEndsAcknowledging(t *testing.T) {
	t.Parallel()
	places, step := 50, 1
	if testing.Short() {
		places, step = 50, 7
	}
	for place := 0; place < places; place += step {
		faulty := &disktest.Faulty{Files: disk.OS(), FailAt: 1 << 30}
		o := options(t)
		o.Files = faulty
		w := openWriter(t, o)
		faulty.FailAt = faulty.Calls() + place
		acknowledged := make(map[string]Result)
		failed := 0
		for i := range 30 {
			id := fmt.Sprintf("entry %d", i)
			r, err := w.Submit(context.Background(), submission(id))
			switch {
			case err == nil && failed > 0:
				t.Fatalf("place %d: %s was acknowledged after a failure", place, id)
			case err == nil:
				acknowledged[id] = r
			case !errors.Is(err, ErrStorageFailed):
				t.Fatalf("place %d: %s: %v", place, id, err)
			case !errors.Is(err, disktest.ErrInjected):
				t.Errorf("place %d: the cause is lost: %v", place, err)
			default:
				failed++
			}
		}
		if failed == 0 || w.Status().Failure == nil {
			t.Fatalf("place %d: nothing failed", place)
		}
		if _, err := w.CloseVolume(context.Background()); !errors.Is(err, ErrStorageFailed) {
			t.Errorf("place %d: close volume: %v", place, err)
		}
		if err := w.Reopen(context.Background()); err != nil {
			t.Fatalf("place %d: reopen: %v", place, err)
		}
		for i := range 30 {
			id := fmt.Sprintf("entry %d", i)
			again := submit(t, w, id)
			if r, was := acknowledged[id]; was && (!again.AlreadyRecorded || again.Sequence != r.Sequence) {
				t.Errorf("place %d: %s was acknowledged as %+v, now %+v", place, id, r, again)
			}
			holds(t, w, id, again)
		}
		if got := total(t, w); got != 30 {
			t.Errorf("place %d: counted %d, want 30", place, got)
		}
		verified(t, w)
		closeWriter(t, w)
	}
}

// TestFailedCommitEndsAcknowledging breaks a file of the open volume under bbolt.
func TestFailedCommitEndsAcknowledging(t *testing.T) {
	t.Parallel()
	for _, name := range []string{"records.db", "samples.db"} {
		var mu sync.Mutex
		files := make(map[string]*os.File)
		o := options(t)
		o.OpenFile = func(path string, flag int, perm fs.FileMode) (*os.File, error) {
			file, err := os.OpenFile(path, flag, perm)
			mu.Lock()
			defer mu.Unlock()
			files[filepath.Base(path)] = file
			return file, err
		}
		w := openWriter(t, o)
		acknowledged := make(map[string]Result)
		for i := range 10 {
			id := fmt.Sprintf("before %d", i)
			acknowledged[id] = submit(t, w, id)
		}
		if err := files[name].Close(); err != nil {
			t.Fatal(err)
		}
		failed := 0
		for i := range 10 {
			// Entries without samples do not touch the samples file.
			if _, err := w.Submit(context.Background(), submission(fmt.Sprintf("after %d", i))); errors.Is(err, ErrStorageFailed) {
				failed++
			} else if err != nil || failed > 0 {
				t.Errorf("%s: after %d: %v, %d failures before", name, i, err, failed)
			}
		}
		if failed == 0 {
			t.Fatalf("%s: nothing failed", name)
		}
		if err := w.Reopen(context.Background()); err != nil {
			t.Fatalf("%s: reopen: %v", name, err)
		}
		for id, r := range acknowledged {
			holds(t, w, id, r)
		}
		for i := range 10 {
			id := fmt.Sprintf("after %d", i)
			holds(t, w, id, submit(t, w, id))
		}
		if got := total(t, w); got != 20 {
			t.Errorf("%s: counted %d, want 20", name, got)
		}
		verified(t, w)
	}
}

// TestDamageWhileRunning damages the open volume under a running store: counters first, which the writer reads at each commit. Without
// permission to go on it stops acknowledging; with it, recording continues in a new volume and no submitter notices.
func TestDamageWhileRunning(t *testing.T) {
	t.Parallel()
	for _, goOn := range []bool{false, true} {
		o := options(t)
		o.SetAsideDamaged = goOn
		w := openWriter(t, o)
		before := submit(t, w, "before")
		flipCounter(t, volumeFile(o, 1, "records.db"))
		r, err := w.Submit(context.Background(), submission("after"))
		if !goOn {
			if !errors.Is(err, ErrStorageFailed) || !errors.Is(err, damage.ErrDamaged) {
				t.Errorf("submit: %+v, %v", r, err)
			}
			if err := w.Reopen(context.Background()); !errors.Is(err, damage.ErrDamaged) {
				t.Errorf("reopen of a damaged volume: %v", err)
			}
			if _, err := w.Submit(context.Background(), submission("after")); !errors.Is(err, ErrStorageFailed) {
				t.Errorf("submit after a reopen that failed: %v", err)
			}
			continue
		}
		if err != nil || r.Volume != 2 || r.Sequence <= before.Sequence {
			t.Errorf("submit: %+v, %v", r, err)
		}
		if again := submit(t, w, "before"); !again.AlreadyRecorded || again.Sequence != before.Sequence {
			t.Errorf("before: %+v, then %+v", before, again)
		}
		holds(t, w, "after", r)
		if list := w.Volumes(); len(list) != 2 || list[0].Stage != volume.SetAside || list[0].Damage == nil {
			t.Errorf("volumes %+v", list)
		}
	}
}

// flipCounter flips a bit in the value of the counter "total" wherever it stands in the file.
func flipCounter(t *testing.T, path string) {
	t.Helper()
	content, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	file, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	key := []byte("total")
	flipped := 0
	for at := 0; at+len(key)+8 < len(content); at++ {
		if string(content[at:at+len(key)]) != string(key) || content[at+len(key)+4] != 1 {
			continue // not followed by an envelope of schema 1
		}
		value := int64(at + len(key) + 7)
		if _, err := file.WriteAt([]byte{content[value] ^ 1}, value); err != nil {
			t.Fatal(err)
		}
		flipped++
	}
	if flipped == 0 {
		t.Fatal("the counter was not found in the file")
	}
}
