package storage

import (
	"errors"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/storage/storagetest"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/disktest"
)

// TestNothingUnacknowledgedIsShown lets the mark fail after the volume was written: the record is on disk, but nobody was told, and no reader
// sees it. After Reopen, everybody does.
func TestNothingUnacknowledgedIsShown(t *testing.T) {
	t.Parallel()
	faulty := &disktest.Faulty{Files: disk.OS(), FailAt: 1 << 30}
	s := openStore(t, t.TempDir(), func(o *WriterOptions) { o.Files = faulty })
	plant := storagetest.NewPlant(t, s)
	first := keep(t, s, plant.Inspection(nil))
	ghost := plant.Inspection(func(b *inspection.Begin) { b.Station = "N2" })
	faulty.FailAt = faulty.Calls()
	if _, err := s.Record(t.Context(), ghost.Record, ghost.Sweeps); inspection.KindOf(err) != inspection.Unavailable || !errors.Is(err, ErrStorageFailed) {
		t.Fatalf("recording while the mark fails: %v", err)
	}
	if on, err := s.writer.shelf.current().volume.Record(first.Sequence + 1); err != nil || on.Sequence == 0 {
		t.Fatalf("the record is not on disk, so the test shows nothing: %v", err)
	}
	see := func() (seen [6]int) {
		ctx := t.Context()
		_, ok, err := s.Find(ctx, ghost.Record.Begin.ID)
		if ok {
			seen[0] = 1
		}
		listed, err1 := s.List(ctx, inspection.Filter{}, 0, 10)
		narrow, err2 := s.List(ctx, inspection.Filter{Station: "N2"}, 0, 10)
		after, err3 := s.After(ctx, 0, 10)
		counts, err4 := s.Count(ctx, inspection.CountFilter{})
		units, err5 := s.CountDispositions(ctx, inspection.CountFilter{})
		if err := errors.Join(err, err1, err2, err3, err4, err5); err != nil {
			t.Fatal(err)
		}
		seen[1], seen[2], seen[3], seen[4], seen[5] = len(listed), len(narrow), len(after), len(counts), len(units)
		return seen
	}
	if got := see(); got != [6]int{0, 1, 0, 1, 1, 1} || s.Last() != first.Sequence {
		t.Errorf("while recording stands still, found, listed, listed of N2, after, counts, units are %v, last %d", got, s.Last())
	}
	_, err := s.Sweeps(t.Context(), ghost.Record.Begin.ID)
	if inspection.KindOf(err) != inspection.Unknown {
		t.Errorf("its sweeps: %v", err)
	}
	st, err := s.Status(t.Context())
	if err != nil || st.Recording || !strings.Contains(st.Fault, "injected") {
		t.Errorf("status %+v, error %v", st, err)
	}
	if err := s.Reopen(t.Context()); err != nil {
		t.Fatal(err)
	}
	if got := see(); got != [6]int{1, 2, 1, 2, 2, 2} {
		t.Errorf("after Reopen they are %v", got)
	}
	if again, err := s.Record(t.Context(), ghost.Record, ghost.Sweeps); err != nil || !again.Already {
		t.Errorf("sent again: %+v, error %v", again, err)
	}
	if st, err = s.Status(t.Context()); err != nil || !st.Recording || st.Fault != "" {
		t.Errorf("status %+v, error %v", st, err)
	}
}

// TestDamagedVolume spoils a closed volume: whoever needs it is told, with its number; everything else works.
func TestDamagedVolume(t *testing.T) {
	t.Parallel()
	folder := t.TempDir()
	s := openStore(t, folder, nil)
	plant := storagetest.NewPlant(t, s)
	in := func(station inspection.StationID, hour int) storagetest.Inspection {
		return plant.Inspection(func(b *inspection.Begin) {
			b.Station, b.MeasuredAt = station, b.MeasuredAt.Add(time.Duration(hour)*time.Hour)
			b.Unit.Serial += inspection.Serial(station)
		})
	}
	inFirst, inSecond := in("N1", 0), in("N2", 5)
	keep(t, s, inFirst)
	if _, err := s.CloseVolume(t.Context()); err != nil {
		t.Fatal(err)
	}
	keep(t, s, inSecond)
	if _, err := s.CloseVolume(t.Context()); err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(folder, volume.FolderName(1), "records.db")
	content, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for at := 0; at < len(content); at += 512 {
		content[at] ^= 1
	}
	if err := os.WriteFile(path, content, 0o640); err != nil {
		t.Fatal(err)
	}
	s = openStore(t, folder, nil)
	inThird := in("N3", 10)
	keep(t, s, inThird)
	ctx := t.Context()
	named := func(what string, err error) {
		t.Helper()
		if !errors.Is(err, damage.ErrDamaged) || !strings.Contains(err.Error(), "volume 1") || inspection.KindOf(err) != inspection.Broken {
			t.Errorf("%s: got error %v, want damage to volume 1", what, err)
		}
	}
	_, _, err = s.Find(ctx, inFirst.Record.Begin.ID)
	named("finding what was in it", err)
	_, err = s.Sweeps(ctx, inFirst.Record.Begin.ID)
	named("sweeps of what was in it", err)
	_, err = s.List(ctx, inspection.Filter{}, 0, 3)
	named("listing more than the others hold", err)
	_, err = s.After(ctx, 0, 3)
	named("following from the first", err)
	_, err = s.Count(ctx, inspection.CountFilter{})
	named("counting all", err)
	_, err = s.Record(ctx, inFirst.Record, inFirst.Sweeps)
	named("recording what it may hold", err)
	for _, m := range []storagetest.Inspection{inSecond, inThird} {
		if _, ok, err := s.Find(ctx, m.Record.Begin.ID); err != nil || !ok {
			t.Errorf("finding %s: %v, error %v", m.Record.Begin.ID, ok, err)
		}
		if page, err := s.List(ctx, inspection.Filter{Serial: m.Record.Begin.Unit.Serial}, 0, 1); err != nil || len(page) != 1 {
			t.Errorf("listing %s: %d records, error %v", m.Record.Begin.Unit.Serial, len(page), err)
		}
	}
	// The filter of the damaged volume still tells what it cannot hold, and the manifest which times.
	if page, err := s.List(ctx, inspection.Filter{Serial: inThird.Record.Begin.Unit.Serial}, 0, 5); err != nil || len(page) != 1 {
		t.Errorf("listing a serial beyond its last: %d records, error %v", len(page), err)
	}
	if page, err := s.List(ctx, inspection.Filter{From: inSecond.Record.Begin.MeasuredAt}, 0, 5); err != nil || len(page) != 2 {
		t.Errorf("listing later times: %d records, error %v", len(page), err)
	}
	if counts, err := s.Count(ctx, inspection.CountFilter{From: inSecond.Record.Begin.MeasuredAt}); err != nil || len(counts) != 2 {
		t.Errorf("counting later times: %v, error %v", counts, err)
	}
}

// TestAgreed holds the intersection of streams against sets.
func TestAgreed(t *testing.T) {
	t.Parallel()
	random := rand.New(rand.NewPCG(7, 1))
	for range 500 {
		sets := make([][]uint64, 1+random.IntN(4))
		for i := range sets {
			for q := range uint64(40) {
				if random.IntN(3) > 0 {
					sets[i] = append(sets[i], q+1)
				}
			}
		}
		// The last is a union of two.
		streams := make([]stream, len(sets))
		for i, set := range sets {
			streams[i] = listed(set)
		}
		other := []uint64{3, 20, 39}
		streams[len(streams)-1] = anyOf{listed(sets[len(sets)-1]), listed(other)}
		top := uint64(random.IntN(45))
		var want, got []uint64
		for q := top; q > 0; q-- {
			in := true
			for i, set := range sets {
				in = in && (slices.Contains(set, q) || i == len(sets)-1 && slices.Contains(other, q))
			}
			if in {
				want = append(want, q)
			}
		}
		for from := top; from > 0; {
			q, ok, err := agreed(streams, from)
			if err != nil {
				t.Fatal(err)
			}
			if !ok {
				break
			}
			got = append(got, q)
			from = q - 1
		}
		if !slices.Equal(want, got) {
			t.Fatalf("%v from %d: got %v, want %v", sets, top, got, want)
		}
	}
}

// listed is a stream over a list that ascends.
type listed []uint64

func (l listed) below(limit uint64) (uint64, bool, error) {
	at, found := slices.BinarySearch(l, limit)
	if found {
		return limit, true, nil
	}
	if at == 0 {
		return 0, false, nil
	}
	return l[at-1], true, nil
}

// TestManyInOneTerm reads an index further than its first pages.
func TestManyInOneTerm(t *testing.T) {
	t.Parallel()
	n := 400
	if testing.Short() {
		n = 100
	}
	s, err := open(Options{Folder: t.TempDir()}, nil)
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	plant := storagetest.NewPlant(t, s)
	for i := range n {
		keep(t, s, plant.Inspection(func(b *inspection.Begin) {
			// One in seventy from another station, a quarter of an hour every fifty.
			b.Station = []inspection.StationID{"N1", "N2"}[min(1, i%70/69)]
			b.MeasuredAt = b.MeasuredAt.Add(time.Duration(i/50) * 15 * time.Minute)
		}))
	}
	for _, c := range []struct {
		filter inspection.Filter
		want   int
	}{
		{inspection.Filter{Lot: "L2601"}, n},
		{inspection.Filter{Lot: "L2601", Station: "N2"}, n / 70},
		{inspection.Filter{From: time.Date(2026, 11, 30, 9, 10, 0, 0, time.UTC)}, n - 50},
	} {
		for _, size := range []int{7, 1000} {
			var got []uint64
			for before := uint64(0); ; {
				page, err := s.List(t.Context(), c.filter, before, size)
				if err != nil {
					t.Fatal(err)
				}
				for _, r := range page {
					got = append(got, r.Sequence)
				}
				if len(page) < size {
					break
				}
				before = got[len(got)-1]
			}
			if len(got) != c.want || !slices.IsSortedFunc(got, func(a, b uint64) int { return int(b) - int(a) }) {
				t.Errorf("%+v in pages of %d: %d records, want %d in falling order", c.filter, size, len(got), c.want)
			}
		}
	}
}
