package catalogue

import (
	"bytes"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"sync"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"go.uber.org/goleak"

	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/disktest"
	"example.com/admit/storage/volume/tree"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

func create(t *testing.T) (store string, c *Catalogue) {
	t.Helper()
	store = t.TempDir()
	c, err := Create(store, Options{Revision: "test-1"})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = c.Close() })
	return store, c
}

// reopened closes the catalogue and opens it again.
func reopened(t *testing.T, store string, c *Catalogue) *Catalogue {
	t.Helper()
	if err := c.Close(); err != nil {
		t.Fatal(err)
	}
	again, err := Open(store, Options{Revision: "test-2"})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = again.Close() })
	return again
}

func TestImmutable(t *testing.T) {
	store, c := create(t)
	type immutable struct {
		name string
		put  func(c *Catalogue, content []byte) error
		get  func(c *Catalogue) ([]byte, error)
	}
	p := PartType{"TM-25M000-F10", 1}
	for _, i := range []immutable{
		{"part type",
			func(c *Catalogue, content []byte) error { return c.PutPartType(p, content) },
			func(c *Catalogue) ([]byte, error) { return c.PartType(p) }},
		{"calibration",
			func(c *Catalogue, content []byte) error { return c.PutCalibration("N1-A-2026-11-30", content) },
			func(c *Catalogue) ([]byte, error) { return c.Calibration("N1-A-2026-11-30") }},
	} {
		if _, err := i.get(c); !errors.Is(err, ErrNotFound) {
			t.Errorf("%s: %v", i.name, err)
		}
		for range 2 {
			if err := i.put(c, []byte("first")); err != nil {
				t.Errorf("%s: %v", i.name, err)
			}
			if err := i.put(c, []byte("second")); !errors.Is(err, ErrDifferentContent) {
				t.Errorf("%s: other content: %v", i.name, err)
			}
			if got, err := i.get(c); err != nil || string(got) != "first" {
				t.Errorf("%s is %q, %v", i.name, got, err)
			}
			c = reopened(t, store, c)
		}
	}
}

func TestLists(t *testing.T) {
	store, c := create(t)
	want := []PartType{{"A", 1}, {"A", 2}, {"A", 300}, {"A-", 1}, {"B", 1}}
	for _, i := range rand.Perm(len(want)) {
		if err := c.PutPartType(want[i], []byte("x")); err != nil {
			t.Fatal(err)
		}
	}
	var ids []string
	for i := range 25 {
		id := fmt.Sprintf("N1-A-%02d", i)
		ids = append(ids, id)
		if err := c.PutCalibration(id, []byte(id)); err != nil {
			t.Fatal(err)
		}
	}
	c = reopened(t, store, c)
	if got, err := c.PartTypes(); err != nil || !cmp.Equal(got, want) {
		t.Errorf("part types %v, %v", got, err)
	}
	var got []string
	for after := ""; ; {
		page, err := c.Calibrations(after, 10)
		if err != nil {
			t.Fatal(err)
		}
		got = append(got, page...)
		if len(page) < 10 {
			break
		}
		after = page[9]
	}
	if !cmp.Equal(got, ids) {
		t.Errorf("calibrations %v", got)
	}
	if err := c.PutCalibration("a\x00b", nil); !errors.Is(err, ErrName) {
		t.Errorf("a name with a zero byte: %v", err)
	}
	if err := c.PutPartType(PartType{"", 1}, nil); !errors.Is(err, ErrName) {
		t.Errorf("no name: %v", err)
	}
	if found := c.Verify(); len(found) > 0 {
		t.Errorf("verify: %v", found)
	}
}

func TestStationsAreASet(t *testing.T) {
	store, c := create(t)
	for _, set := range [][]Station{
		{{"N1", []byte("pi-network")}, {"N2", []byte("pi-network")}},
		{{"N1", []byte("reflection")}, {"S1", []byte("pi-network")}},
		{{"N1", []byte("reflection")}, {"S1", []byte("pi-network")}},
		nil,
	} {
		if err := c.SetStations(set); err != nil {
			t.Fatal(err)
		}
		if got, err := c.Stations(); err != nil || !cmp.Equal(got, set) {
			t.Errorf("stations %v, want %v (%v)", got, set, err)
		}
		c = reopened(t, store, c)
	}
	if found := c.Verify(); len(found) > 0 {
		t.Errorf("verify: %v", found)
	}
}

func TestManifestAndCursors(t *testing.T) {
	store, c := create(t)
	when := time.Date(2026, 11, 30, 9, 0, 0, 17, time.UTC)
	want := []volume.Info{
		{Number: 1, ID: [16]byte{1, 2}, Stage: volume.Closed, CreatedAt: when, Age: time.Hour, Records: 10, FirstSequence: 1,
			LastSequence: 12, FirstTested: when, LastTested: when.Add(time.Second), RecordsBytes: 4096, SamplesBytes: 8192, SamplesKept: true},
		{Number: 2, Stage: volume.Open, CreatedAt: when},
	}
	for _, info := range want {
		// A row is replaced as a volume moves on.
		if err := c.PutVolume(volume.Info{Number: info.Number, Stage: volume.Open}); err != nil {
			t.Fatal(err)
		}
		if err := c.PutVolume(info); err != nil {
			t.Fatal(err)
		}
	}
	if err := c.SetCursor("watcher", []byte("17")); err != nil {
		t.Fatal(err)
	}
	id := c.StoreID()
	c = reopened(t, store, c)
	if got, err := c.Volumes(); err != nil || !cmp.Equal(got, want) {
		t.Errorf("manifest %+v, %v", got, err)
	}
	if got, err := c.Cursor("watcher"); err != nil || string(got) != "17" {
		t.Errorf("cursor %q, %v", got, err)
	}
	if _, err := c.Cursor("other"); !errors.Is(err, ErrNotFound) {
		t.Errorf("other cursor: %v", err)
	}
	if c.StoreID() != id || id == [16]byte{} {
		t.Errorf("store id %x became %x", id, c.StoreID())
	}
}

// TestManyWriters publishes the same and different content from many goroutines: exactly one content wins.
func TestManyWriters(t *testing.T) {
	_, c := create(t)
	var group sync.WaitGroup
	results := make([]error, 16)
	for i := range results {
		group.Go(func() { results[i] = c.PutCalibration("one", fmt.Appendf(nil, "content %d", i%4)) })
	}
	group.Wait()
	got, err := c.Calibration("one")
	if err != nil {
		t.Fatal(err)
	}
	for i, err := range results {
		if won := string(got) == fmt.Sprintf("content %d", i%4); won != (err == nil) || !won && !errors.Is(err, ErrDifferentContent) {
			t.Errorf("writer %d of %q got %v", i, got, err)
		}
	}
}

// TestDamage flips bits and cuts the file: an error that says where, or the right answer, and the file is not touched.
func TestDamage(t *testing.T) {
	store, c := create(t)
	content := map[string]string{}
	for i := range 40 {
		id := fmt.Sprintf("calibration %d", i)
		content[id] = fmt.Sprintf("%0500d", i)
		if err := c.PutCalibration(id, []byte(content[id])); err != nil {
			t.Fatal(err)
		}
	}
	if err := c.Close(); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(store, FileName)
	sound, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	meta, err := tree.ReadMeta(bytes.NewReader(sound), int64(len(sound)))
	if err != nil {
		t.Fatal(err)
	}
	used := int(meta.Bytes()) // behind it is only what was reserved
	random := rand.New(rand.NewPCG(11, 12))
	noticed, lastAt := 0, 0
	for i := range 150 {
		broken := append([]byte{}, sound...)
		inMeta := false
		switch {
		case i < 20:
			broken = broken[:used*i/20]
		default:
			at := random.IntN(used)
			lastAt = at
			inMeta = at < 2*tree.PageSize
			broken[at] ^= 1 << random.IntN(8)
		}
		if err := os.WriteFile(path, broken, 0o600); err != nil {
			t.Fatal(err)
		}
		c, err := Open(store, Options{})
		if err != nil {
			noticed++
			if !errors.Is(err, damage.ErrDamaged) {
				t.Errorf("case %d: %v", i, err)
			}
		} else {
			for id, want := range content {
				got, err := c.Calibration(id)
				switch {
				case errors.Is(err, damage.ErrDamaged):
					noticed++
				case errors.Is(err, ErrNotFound) && inMeta: // as if the last commit had not been
				case err != nil || string(got) != want:
					t.Errorf("case %d: %s is %q, %v (at %d)", i, id, got, err, lastAt)
				}
			}
			if err := c.Close(); err != nil {
				t.Error(err)
			}
		}
		if after, err := os.ReadFile(path); err != nil || string(after) != string(broken) {
			t.Errorf("case %d: the file was changed", i)
		}
	}
	if noticed < 20 {
		t.Errorf("only %d cases noticed", noticed)
	}
}

func TestCreateFails(t *testing.T) {
	for failAt := range 2 {
		store := t.TempDir()
		if _, err := Create(store, Options{Files: &disktest.Faulty{Files: disk.OS(), FailAt: failAt}}); !errors.Is(err, disktest.ErrInjected) {
			t.Errorf("call %d: %v", failAt, err)
		}
		c, err := Open(store, Options{})
		if errors.Is(err, os.ErrNotExist) {
			c, err = Create(store, Options{})
		}
		if err != nil {
			t.Fatalf("after call %d failed: %v", failAt, err)
		}
		if err := c.Close(); err != nil {
			t.Error(err)
		}
		if _, err := Create(store, Options{}); err == nil {
			t.Error("a second catalogue was made over the first")
		}
	}
}
