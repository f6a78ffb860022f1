package storage

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"google.golang.org/protobuf/proto"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/storage/storagetest"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
)

// TestStoredPartTypeIsHeldAgainstItsHash puts wrong contents under a name: whoever asks is told what is wrong with it.
func TestStoredPartTypeIsHeldAgainstItsHash(t *testing.T) {
	t.Parallel()
	p := storagetest.PartType(t, "TM-50M000-T3", 1, "good")
	sum := p.Hash()
	good := &pb.PartType{Name: p.Name, Version: 1, LimitsFile: p.Source, Sha256: sum[:]}
	for _, c := range []struct {
		name, says string
		damaged    bool
		spoil      func(*pb.PartType)
	}{
		{"other limits", "SHA-256", true, func(m *pb.PartType) { m.LimitsFile = append([]byte("# other\n"), p.Source...) }},
		{"other version", "version 1", true, func(m *pb.PartType) {}},
		{"not a limits file", "can no longer be read", false, func(m *pb.PartType) {
			m.LimitsFile = []byte("part_type: [")
			h := storagetest.PartType(t, "TM-50M000-T3", 1, "good")
			h.Source = m.LimitsFile
			sum := h.Hash()
			m.Sha256 = sum[:]
		}},
	} {
		folder := t.TempDir()
		s := openStore(t, folder, nil)
		m := proto.Clone(good).(*pb.PartType)
		c.spoil(m)
		content, err := proto.Marshal(m)
		if err != nil {
			t.Fatal(err)
		}
		key := partTypeKey{Name: "TM-50M000-T3", Version: 1}
		if c.name == "other version" {
			key.Version = 2
		}
		if err := s.writer.Catalogue().PutPartType(key, content); err != nil {
			t.Fatal(err)
		}
		if err := s.Close(); err != nil {
			t.Fatal(err)
		}
		s = openStore(t, folder, nil)
		_, err = s.PartType(t.Context(), "TM-50M000-T3", 0)
		if err == nil || errors.Is(err, damage.ErrDamaged) != c.damaged || inspection.KindOf(err) != inspection.Broken ||
			!strings.Contains(err.Error(), c.says) || !strings.Contains(err.Error(), "TM-50M000-T3") {
			t.Errorf("%s: %v", c.name, err)
		}
	}
}

// TestPublishAtOnce publishes one thing, and two of one name, from many callers: one is kept, everybody agrees which.
func TestPublishAtOnce(t *testing.T) {
	t.Parallel()
	s := openStore(t, t.TempDir(), nil)
	var all sync.WaitGroup
	var mu sync.Mutex
	fresh, conflicts := map[string]int{}, map[string]int{}
	note := func(what string, already bool, err error) {
		mu.Lock()
		defer mu.Unlock()
		switch {
		case inspection.KindOf(err) == inspection.Conflict && err != nil:
			conflicts[what]++
		case err != nil:
			t.Errorf("%s: %v", what, err)
		case !already:
			fresh[what]++
		}
	}
	const n = 10
	for i := range n {
		p := storagetest.PartType(t, "TM-50M000-T3", 1, fmt.Sprint("file ", i%2))
		c := storagetest.Calibration("N1-A", "N1-A")
		if i%2 > 0 {
			c.ContactUncertaintyOhm = 0.1
		}
		all.Go(func() {
			_, already, err := s.PublishPartType(context.Background(), p, "")
			note("part type", already, err)
		})
		all.Go(func() {
			already, err := s.PublishCalibration(context.Background(), c, "")
			note("calibration", already, err)
		})
	}
	all.Wait()
	for _, what := range []string{"part type", "calibration"} {
		if fresh[what] != 1 || conflicts[what] != n/2 {
			t.Errorf("%s: %d fresh, %d conflicts; want 1 and %d", what, fresh[what], conflicts[what], n/2)
		}
	}
}

// TestCalibrationThatWouldChangeIsRefused: what the stored form cannot hold is not stored as something else.
func TestCalibrationThatWouldChangeIsRefused(t *testing.T) {
	t.Parallel()
	s := openStore(t, t.TempDir(), nil)
	for name, spoil := range map[string]func(*network.Calibration){
		"no network of ours": func(c *network.Calibration) { c.Network = "ladder" },
		"negative duration":  func(c *network.Calibration) { c.ValidFor = -time.Hour },
		"no name":            func(c *network.Calibration) { c.ID = "" },
	} {
		c := storagetest.Calibration("N1-A", "N1-A")
		spoil(c)
		if _, err := s.PublishCalibration(t.Context(), c, ""); inspection.KindOf(err) != inspection.Malformed {
			t.Errorf("%s: %v", name, err)
		}
	}
}

// TestShared asks for few things, many times at once, and for more than fits.
func TestShared(t *testing.T) {
	t.Parallel()
	c := newShared[int, *int](100)
	reads := 0
	read := func(bytes int64) func() (*int, int64, error) {
		return func() (*int, int64, error) { reads++; return new(int), bytes, nil }
	}
	get := func(key int) *int {
		v, err := c.get(key, read(40))
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	one, two := get(1), get(2)
	if get(1) != one || get(2) != two || reads != 2 {
		t.Errorf("%d reads of two things", reads)
	}
	get(1)
	get(3) // 2 was asked for longest ago
	if get(1) != one || reads != 3 {
		t.Error("the one asked for last was forgotten")
	}
	if get(2) == two || reads != 4 {
		t.Error("the one asked for first was kept beyond the limit")
	}
	if v, err := c.get(9, read(1000)); err != nil || v == nil {
		t.Errorf("one larger than the limit: %v", err)
	}
	fault := errors.New("unreadable")
	if _, err := c.get(10, func() (*int, int64, error) { return nil, 0, fault }); !errors.Is(err, fault) {
		t.Errorf("an error is lost: %v", err)
	}
	if v, err := c.get(10, read(1)); err != nil || v == nil {
		t.Errorf("an error was kept: %v", err)
	}
}

// TestFaults says of each error of the writer what the sender may do.
func TestFaults(t *testing.T) {
	t.Parallel()
	s := openStore(t, t.TempDir(), nil)
	for _, c := range []struct {
		err  error
		kind inspection.Kind
		says string
	}{
		{fmt.Errorf("volume 1: %w", ErrFull), inspection.Busy, "the disk is full"},
		{disk.Classify(syscall.ENOSPC), inspection.Busy, "the disk is full"},
		{fmt.Errorf("%w: waited", ErrBusy), inspection.Busy, "too much is waiting"},
		{ErrTooLarge, inspection.Busy, "larger"},
		{fmt.Errorf("%w: sync", ErrStorageFailed), inspection.Unavailable, "storage failed"},
		{ErrClosed, inspection.Unavailable, "closed"},
		{fmt.Errorf("%w: 65 terms", volume.ErrInvalid), inspection.Malformed, "65 terms"},
		{inspection.Faultf(inspection.Unknown, "x", "said before"), inspection.Unknown, "said before"},
	} {
		got := s.faultOf(c.err)
		if inspection.KindOf(got) != c.kind || !errors.Is(got, c.err) || !strings.Contains(got.Error(), c.says) {
			t.Errorf("%v: became %v of kind %v, want kind %v and %q", c.err, got, inspection.KindOf(got), c.kind, c.says)
		}
	}
	if err := s.faultOf(context.Canceled); err != context.Canceled {
		t.Errorf("the caller's own end became %v", err)
	}
}

// TestFullDiskInStatus: full is full until five seconds have passed, or a record got through; and while there is hardly any room.
func TestFullDiskInStatus(t *testing.T) {
	t.Parallel()
	c := &clock{at: time.Date(2026, 11, 30, 9, 0, 0, 0, time.UTC)}
	s, err := open(Options{Folder: t.TempDir(), Clock: c}, nil)
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	const plenty = 1 << 30
	if s.full(0) {
		t.Error("full before anything was refused")
	}
	s.noteFull(fmt.Errorf("volume 1: %w", ErrFull))
	st, err := s.Status(t.Context())
	if err != nil || st.Recording || !strings.Contains(st.Fault, "the disk is full") || st.FreeBytes == 0 {
		t.Errorf("status %+v, error %v", st, err)
	}
	c.set(c.Now().Add(6 * time.Second))
	if s.full(plenty) || !s.full(fullBelow-1) {
		t.Error("six seconds later: want full only while there is hardly any room")
	}
	c.set(c.Now().Add(-time.Hour))
	if s.full(plenty) {
		t.Error("full because the clock was set back")
	}
	s.noteFull(nil)
	if s.full(0) {
		t.Error("full after a record got through")
	}
}
