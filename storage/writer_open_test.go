package storage

import (
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"testing"
	"time"

	"example.com/admit/storage/catalogue"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
)

// TestTwoOpeners opens a store that is open, twenty times at once: each leaves within three seconds, the first is not disturbed.
func TestTwoOpeners(t *testing.T) {
	t.Parallel()
	o := options(t)
	w := openWriter(t, o)
	var group sync.WaitGroup
	for range 20 {
		group.Go(func() {
			began := time.Now()
			second, err := OpenWriter(o)
			if !errors.Is(err, ErrInUse) {
				t.Errorf("second opener: %v", err)
			}
			if took := time.Since(began); took > 3*time.Second {
				t.Errorf("it took %v to leave", took)
			}
			if err == nil {
				closeWriter(t, second)
			}
		})
	}
	for i := range 20 {
		id := fmt.Sprintf("meanwhile %d", i)
		holds(t, w, id, submit(t, w, id))
	}
	group.Wait()
}

// built is a store of three volumes: two closed, one open, all with entries.
func built(t *testing.T) (WriterOptions, map[string]Result) {
	t.Helper()
	o := options(t)
	w, err := OpenWriter(o)
	if err != nil {
		t.Fatal(err)
	}
	results := make(map[string]Result)
	for v := range 3 {
		for i := range 5 {
			id := fmt.Sprintf("v%d entry %d", v+1, i)
			results[id] = submit(t, w, id)
		}
		if v < 2 {
			if _, err := w.CloseVolume(context.Background()); err != nil {
				t.Fatal(err)
			}
		}
	}
	closeWriter(t, w)
	return o, results
}

// zeroNewestMeta damages the meta page of the last commit of a bbolt file.
func zeroNewestMeta(t *testing.T, path string) {
	t.Helper()
	file, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	var transactions [2]uint64
	for i := range transactions {
		b := make([]byte, 8)
		if _, err := file.ReadAt(b, int64(i)*4096+16+48); err != nil {
			t.Fatal(err)
		}
		transactions[i] = binary.LittleEndian.Uint64(b)
	}
	newest := int64(0)
	if transactions[1] > transactions[0] {
		newest = 1
	}
	if _, err := file.WriteAt(make([]byte, 4096), newest*4096); err != nil {
		t.Fatal(err)
	}
}

func volumeFile(o WriterOptions, number uint64, name string) string {
	return filepath.Join(o.Folder, volume.FolderName(number), name)
}

// TestOpenBelievesNothing damages a store in ways that must end opening, and holds that nothing was changed or made anew.
func TestOpenBelievesNothing(t *testing.T) {
	t.Parallel()
	remove := func(path string) func(*testing.T) {
		return func(t *testing.T) {
			if err := os.RemoveAll(path); err != nil {
				t.Fatal(err)
			}
		}
	}
	truncate := func(path string, size int64) func(*testing.T) {
		return func(t *testing.T) {
			if err := os.Truncate(path, size); err != nil {
				t.Fatal(err)
			}
		}
	}
	for _, c := range []struct {
		name string
		harm func(o WriterOptions) func(*testing.T)
		lost bool
	}{
		{"catalogue missing", func(o WriterOptions) func(*testing.T) { return remove(filepath.Join(o.Folder, catalogue.FileName)) }, false},
		{"catalogue empty", func(o WriterOptions) func(*testing.T) {
			return truncate(filepath.Join(o.Folder, catalogue.FileName), 0)
		}, false},
		{"mark missing", func(o WriterOptions) func(*testing.T) { return remove(filepath.Join(o.Folder, markName)) }, false},
		{"mark empty", func(o WriterOptions) func(*testing.T) { return truncate(filepath.Join(o.Folder, markName), 0) }, false},
		{"open volume missing", func(o WriterOptions) func(*testing.T) {
			return remove(filepath.Join(o.Folder, volume.FolderName(3)))
		}, false},
		{"records missing", func(o WriterOptions) func(*testing.T) { return remove(volumeFile(o, 3, "records.db")) }, false},
		{"records empty", func(o WriterOptions) func(*testing.T) { return truncate(volumeFile(o, 3, "records.db"), 0) }, false},
		{"records short", func(o WriterOptions) func(*testing.T) { return truncate(volumeFile(o, 3, "records.db"), 5*4096) }, false},
		{"samples missing", func(o WriterOptions) func(*testing.T) { return remove(volumeFile(o, 3, "samples.db")) }, false},
		{"samples empty", func(o WriterOptions) func(*testing.T) { return truncate(volumeFile(o, 3, "samples.db"), 0) }, false},
		{"last commit lost", func(o WriterOptions) func(*testing.T) {
			return func(t *testing.T) { zeroNewestMeta(t, volumeFile(o, 3, "records.db")) }
		}, true},
		{"another volume in its place", func(o WriterOptions) func(*testing.T) {
			return func(t *testing.T) {
				remove(filepath.Join(o.Folder, volume.FolderName(3)))(t)
				v, err := volume.Create(o.Folder, 3, volume.Options{})
				if err != nil {
					t.Fatal(err)
				}
				if err := v.Close(); err != nil {
					t.Fatal(err)
				}
			}
		}, false},
		{"volume the manifest does not know", func(o WriterOptions) func(*testing.T) {
			return func(t *testing.T) {
				from, to := filepath.Join(o.Folder, volume.FolderName(3)), filepath.Join(o.Folder, volume.FolderName(4))
				if err := os.CopyFS(to, os.DirFS(from)); err != nil {
					t.Fatal(err)
				}
			}
		}, false},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			o, _ := built(t)
			c.harm(o)(t)
			before := tree(t, o.Folder)
			w, err := OpenWriter(o)
			if err == nil {
				closeWriter(t, w)
			}
			var found *damage.Error
			if !errors.As(err, &found) || found.File == "" && found.Volume == 0 {
				t.Errorf("open: %v", err)
			}
			if errors.Is(err, ErrLostCommit) != c.lost {
				t.Errorf("lost commit: %v", err)
			}
			if after := tree(t, o.Folder); after != before {
				t.Error("the store was changed")
			}
		})
	}
}

// tree is the content of a store.
func tree(t *testing.T, folder string) (all string) {
	t.Helper()
	entries, err := os.ReadDir(folder)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		path := filepath.Join(folder, e.Name())
		if e.IsDir() {
			all += e.Name() + ": " + snapshot(t, path)
			continue
		}
		content, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		all += fmt.Sprintf("%s %d ", e.Name(), len(content)) + string(content)
	}
	return all
}

// TestOldManifest opens a store whose catalogue comes from an older copy.
func TestOldManifest(t *testing.T) {
	t.Parallel()
	o := options(t)
	w := openWriter(t, o)
	submit(t, w, "a")
	closeWriter(t, w)
	old, err := os.ReadFile(filepath.Join(o.Folder, catalogue.FileName))
	if err != nil {
		t.Fatal(err)
	}
	w = openWriter(t, o)
	if _, err := w.CloseVolume(context.Background()); err != nil {
		t.Fatal(err)
	}
	submit(t, w, "b")
	closeWriter(t, w)
	if err := os.WriteFile(filepath.Join(o.Folder, catalogue.FileName), old, 0o600); err != nil {
		t.Fatal(err)
	}
	if w, err := OpenWriter(o); !errors.Is(err, damage.ErrDamaged) {
		t.Errorf("open: %v", err)
		closeWriter(t, w)
	}
}

// TestClosedDamageIsContained damages closed volumes: the store opens, other volumes serve, new entries are recorded, what is read of the
// damaged one is right or an error, ids that only it can know are refused rather than recorded twice.
func TestClosedDamageIsContained(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		name string
		harm func(o WriterOptions) error
		gone bool // nothing of the volume can be read
	}{
		{"records empty", func(o WriterOptions) error { return os.Truncate(volumeFile(o, 1, "records.db"), 0) }, true},
		{"records missing", func(o WriterOptions) error { return os.Remove(volumeFile(o, 1, "records.db")) }, true},
		{"samples missing", func(o WriterOptions) error { return os.Remove(volumeFile(o, 1, "samples.db")) }, true},
		{"checksums missing", func(o WriterOptions) error { return os.Remove(volumeFile(o, 1, "pages.crc")) }, true},
		{"filter missing", func(o WriterOptions) error { return os.Remove(volumeFile(o, 1, "terms.filter")) }, false},
		{"checksums empty", func(o WriterOptions) error { return os.Truncate(volumeFile(o, 1, "pages.crc"), 0) }, true},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			o, results := built(t)
			if err := c.harm(o); err != nil {
				t.Fatal(err)
			}
			w := openWriter(t, o)
			if status := w.Status(); (status.Damaged == 1) != c.gone || status.Volumes != 3 {
				t.Errorf("status %+v", status)
			}
			for id, r := range results {
				again, err := w.Submit(context.Background(), submission(id))
				switch {
				case err == nil:
					if !again.AlreadyRecorded || again.Sequence != r.Sequence {
						t.Errorf("%s: recorded again as %+v", id, again)
					}
				case r.Volume != 1 || !c.gone || !errors.Is(err, damage.ErrDamaged):
					t.Errorf("%s: %v", id, err)
				}
			}
			refused := 0
			for i := range 50 {
				if _, err := w.Submit(context.Background(), submission(fmt.Sprintf("v1 entry 2%d", i))); err != nil {
					refused++
				}
			}
			// Inside the bounds of the filter, so a few may look as if they were in the damaged volume.
			if refused > 5 {
				t.Errorf("%d of 50 new entries were refused", refused)
			}
			if r := submit(t, w, "new"); !c.gone {
				holds(t, w, "new", r)
			}
			if v, err := w.Volume(1); c.gone && (v != nil || !errors.Is(err, damage.ErrDamaged)) {
				t.Errorf("volume 1: %v, %v", v, err)
			}
			for _, number := range []uint64{2, 3} {
				v, err := w.Volume(number)
				if err != nil {
					t.Fatal(err)
				}
				if report, err := v.Verify(context.Background()); err != nil || report.Err() != nil {
					t.Errorf("volume %d: %v, %v", number, err, report.Err())
				}
			}
		})
	}
}

// TestSetAside opens a store with a damaged open volume and the permission to go on: recording continues in a new volume, no sequence is given
// twice, what can be read of the old one still can, and the decision is remembered.
func TestSetAside(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		name     string
		harm     func(t *testing.T, o WriterOptions)
		readable bool
	}{
		{"last commit lost", func(t *testing.T, o WriterOptions) { zeroNewestMeta(t, volumeFile(o, 3, "records.db")) }, true},
		{"records empty", func(t *testing.T, o WriterOptions) {
			if err := os.Truncate(volumeFile(o, 3, "records.db"), 0); err != nil {
				t.Fatal(err)
			}
		}, false},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			o, results := built(t)
			c.harm(t, o)
			before := snapshot(t, filepath.Join(o.Folder, volume.FolderName(3)))
			o.SetAsideDamaged = true
			w := openWriter(t, o)
			highest := uint64(0)
			for _, r := range results {
				highest = max(highest, r.Sequence)
			}
			r := submit(t, w, "after the damage")
			if r.Volume != 4 || r.Sequence <= highest {
				t.Errorf("recorded as %+v, highest before was %d", r, highest)
			}
			// The first entry of the damaged volume is known if it can be read; a closed volume's always.
			again := submit(t, w, "v3 entry 0")
			if again.AlreadyRecorded != c.readable {
				t.Errorf("an entry of the damaged volume: %+v", again)
			}
			if again := submit(t, w, "v1 entry 0"); !again.AlreadyRecorded {
				t.Error("an entry of a closed volume was recorded again")
			}
			closeWriter(t, w)
			o.SetAsideDamaged = false
			w = openWriter(t, o)
			if status := w.Status(); status.Damaged != 1 || status.Volumes != 4 {
				t.Errorf("status %+v", status)
			}
			if again := submit(t, w, "after the damage"); !again.AlreadyRecorded || again.Sequence != r.Sequence {
				t.Errorf("recorded as %+v, then %+v", r, again)
			}
			if after := snapshot(t, filepath.Join(o.Folder, volume.FolderName(3))); after != before {
				t.Error("the damaged volume was changed")
			}
		})
	}
}
