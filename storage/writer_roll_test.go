package storage

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"testing"
	"time"

	"example.com/admit/storage/volume"
)

// fakeClock is a clock that moves only when told to.
type fakeClock struct {
	mu  sync.Mutex
	now time.Time
}

func (c *fakeClock) Now() time.Time {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.now
}

func (c *fakeClock) advance(d time.Duration) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.now = c.now.Add(d)
}

// TestRollByAge begins a new volume after a day of being open, restarts not counted, and never for an empty one.
func TestRollByAge(t *testing.T) {
	t.Parallel()
	clock := &fakeClock{now: tested}
	o := options(t)
	o.Clock = clock.Now
	w := openWriter(t, o)
	clock.advance(30 * time.Hour) // empty: stays
	if r := submit(t, w, "a"); r.Volume != 1 {
		t.Errorf("a is in volume %d", r.Volume)
	}
	if r := submit(t, w, "b"); r.Volume != 2 {
		t.Errorf("b is in volume %d", r.Volume)
	}
	clock.advance(23 * time.Hour)
	if r := submit(t, w, "c"); r.Volume != 2 {
		t.Errorf("c is in volume %d", r.Volume)
	}
	closeWriter(t, w)
	clock.advance(-100 * time.Hour) // a restart, and a wall clock that was set back
	w = openWriter(t, o)
	if r := submit(t, w, "d"); r.Volume != 2 {
		t.Errorf("d is in volume %d", r.Volume)
	}
	clock.advance(2 * time.Hour)
	if r := submit(t, w, "e"); r.Volume != 3 {
		t.Errorf("e is in volume %d: the 23 hours before the restart do not count", r.Volume)
	}
}

// TestCloseVolume leaves the volume closed on disk and in the manifest, and its files do not change any more.
func TestCloseVolume(t *testing.T) {
	t.Parallel()
	o := options(t)
	w := openWriter(t, o)
	if n, err := w.CloseVolume(context.Background()); n != 0 || err != nil {
		t.Errorf("closing an empty volume: %d, %v", n, err)
	}
	first := submit(t, w, "a")
	n, err := w.CloseVolume(context.Background())
	if n != 1 || err != nil {
		t.Fatalf("close: %d, %v", n, err)
	}
	before := snapshot(t, filepath.Join(o.Folder, volume.FolderName(1)))
	holds(t, w, "a", first)
	if r := submit(t, w, "b"); r.Volume != 2 || r.Sequence <= first.Sequence {
		t.Errorf("b: %+v", r)
	}
	rows, err := w.Catalogue().Volumes()
	if err != nil || len(rows) != 2 || rows[0].Stage != volume.Closed || rows[0].Records != 1 || rows[1].Stage != volume.Open {
		t.Errorf("manifest %+v, %v", rows, err)
	}
	closeWriter(t, w)
	w = openWriter(t, o)
	holds(t, w, "a", first)
	if after := snapshot(t, filepath.Join(o.Folder, volume.FolderName(1))); after != before {
		t.Error("the files of a closed volume changed")
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := w.CloseVolume(ctx); !errors.Is(err, context.Canceled) {
		t.Errorf("closing with a context that has ended: %v", err)
	}
}

// snapshot is the content of all files of a folder.
func snapshot(t *testing.T, folder string) (all string) {
	t.Helper()
	entries, err := os.ReadDir(folder)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		content, err := os.ReadFile(filepath.Join(folder, e.Name()))
		if err != nil {
			t.Fatal(err)
		}
		all += fmt.Sprintf("%s %d ", e.Name(), len(content)) + string(content)
	}
	return all
}

// TestSealingIsCaughtUp opens a store that stopped between rolling over and closing the old volume, and one that stopped between closing it
// and saying so in the manifest.
func TestSealingIsCaughtUp(t *testing.T) {
	t.Parallel()
	for _, sidecars := range []bool{false, true} {
		o := options(t)
		w := openWriter(t, o)
		first := submit(t, w, "a")
		if _, err := w.CloseVolume(context.Background()); err != nil {
			t.Fatal(err)
		}
		open := w.Volumes()[0].Info
		open.Stage = volume.Open
		if err := w.Catalogue().PutVolume(open); err != nil {
			t.Fatal(err)
		}
		closeWriter(t, w)
		if !sidecars {
			for _, name := range []string{"pages.crc", "terms.filter"} {
				if err := os.Remove(filepath.Join(o.Folder, volume.FolderName(1), name)); err != nil {
					t.Fatal(err)
				}
			}
		}
		w = openWriter(t, o)
		holds(t, w, "a", first)
		closedWithin(t, w, 1)
		holds(t, w, "a", first)
		rows, err := w.Catalogue().Volumes()
		if err != nil || rows[0].Stage != volume.Closed {
			t.Errorf("sidecars %v: manifest %+v, %v", sidecars, rows, err)
		}
	}
}

// closedWithin waits until a volume is closed.
func closedWithin(t *testing.T, w *Writer, number uint64) {
	t.Helper()
	for deadline := time.Now().Add(5 * time.Second); time.Now().Before(deadline); time.Sleep(5 * time.Millisecond) {
		rows, err := w.Catalogue().Volumes()
		if err != nil {
			t.Fatal(err)
		}
		if rows[number-1].Stage == volume.Closed {
			return
		}
	}
	t.Errorf("volume %d is still not closed", number)
}

// TestAdoptsNewVolume opens a store that stopped between making a volume and entering it in the manifest.
func TestAdoptsNewVolume(t *testing.T) {
	t.Parallel()
	o := options(t)
	w := openWriter(t, o)
	first := submit(t, w, "a")
	closeWriter(t, w)
	fresh, err := volume.Create(o.Folder, 2, volume.Options{LimitBytes: o.VolumeBytes})
	if err != nil {
		t.Fatal(err)
	}
	if err := fresh.Close(); err != nil {
		t.Fatal(err)
	}
	w = openWriter(t, o)
	holds(t, w, "a", first)
	if r := submit(t, w, "b"); r.Volume != 2 || r.Sequence <= first.Sequence {
		t.Errorf("b: %+v", r)
	}
	closedWithin(t, w, 1)
}

// TestWaitingIsBounded fills the queue while the writer is held up.
func TestWaitingIsBounded(t *testing.T) {
	t.Parallel()
	o := options(t)
	o.QueueBytes = 100_000
	w := openWriter(t, o)
	release := hold(t, w)
	var group sync.WaitGroup
	big := submission("too large")
	big.Bytes = 100_001
	if _, err := w.Submit(context.Background(), big); !errors.Is(err, ErrTooLarge) {
		t.Errorf("too large: %v", err)
	}
	for i := range 8 {
		group.Go(func() {
			s := submission(fmt.Sprintf("waits %d", i))
			s.Bytes = 30_000
			if _, err := w.Submit(context.Background(), s); err != nil {
				t.Error(err)
			}
		})
	}
	awaitQueue(t, w, 4)
	if s := w.Status(); s.WaitingBytes > o.QueueBytes {
		t.Errorf("%d bytes wait, at most %d may", s.WaitingBytes, o.QueueBytes)
	}
	ctx, cancel := context.WithTimeout(context.Background(), 10*time.Millisecond)
	defer cancel()
	s := submission("gives up")
	s.Bytes = 90_000
	if _, err := w.Submit(ctx, s); !errors.Is(err, ErrBusy) || !errors.Is(err, context.DeadlineExceeded) {
		t.Errorf("no room: %v", err)
	}
	release()
	group.Wait()
	if s := w.Status(); s.Waiting != 0 || s.WaitingBytes != 0 || s.Last != 9 {
		t.Errorf("status %+v", s)
	}
	if found, err := findAll(w, "gives up"); err != nil || len(found) > 0 {
		t.Errorf("a submission that gave up is recorded: %v, %v", found, err)
	}
}
