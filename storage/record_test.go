package storage

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"google.golang.org/protobuf/proto"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
	"example.com/admit/storage/storagetest"
	"example.com/admit/storage/volume"
)

// openStore opens a store of small volumes that is closed with the test.
func openStore(t testing.TB, folder string, change func(*WriterOptions)) *Store {
	t.Helper()
	s, err := open(Options{Folder: folder, Revision: "test revision", VolumeBytes: 192 << 10}, change)
	if err != nil {
		t.Fatalf("opening the store: %v", err)
	}
	t.Cleanup(func() { s.Close() })
	return s
}

// plantWith returns a store and a plant that records into it.
func plantWith(t testing.TB) (*Store, *storagetest.Plant) {
	t.Helper()
	s := openStore(t, t.TempDir(), nil)
	return s, storagetest.NewPlant(t, s)
}

func keep(t testing.TB, s *Store, m storagetest.Inspection) *inspection.Record {
	t.Helper()
	kept, err := s.Record(t.Context(), m.Record, m.Sweeps)
	if err != nil || kept.Already {
		t.Fatalf("recording %s: already %v, error %v", m.Record.Begin.ID, kept.Already, err)
	}
	return kept.Record
}

// TestVolumeIsCompleteEvidence reads a volume with nothing else at hand, by the words of record.go, samples.go and count.go alone: generated
// messages, package volume, and a decoder written here.
func TestVolumeIsCompleteEvidence(t *testing.T) {
	t.Parallel()
	s, plant := plantWith(t)
	m := plant.Inspection(func(b *inspection.Begin) {
		b.Unit = inspection.UnitID{Lot: "L2601", Carrier: "C07", Pocket: 12}
		b.MeasuredAt = time.Date(2026, 11, 30, 9, 44, 59, 999, time.UTC)
	}).Retest(verdict.TooNoisy)
	m.Sweeps[0].Re[3] = math.Copysign(0, -1)
	m.Record.ContentHash = inspection.ContentHash(&m.Record.Begin, m.Sweeps)
	keep(t, s, m)
	number, err := s.CloseVolume(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	alone := filepath.Join(t.TempDir(), "copy")
	if err := os.CopyFS(alone, os.DirFS(filepath.Join(s.folder, volume.FolderName(number)))); err != nil {
		t.Fatal(err)
	}
	v, err := volume.OpenForReading(alone, volume.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer v.Close()
	stored, err := v.Record(1)
	if err != nil {
		t.Fatal(err)
	}
	var message pb.Inspection
	if err := proto.Unmarshal(stored.Payload, &message); err != nil {
		t.Fatal(err)
	}
	if message.GetInspectionId() != m.Record.Begin.ID.String() || message.GetSequence() != 1 || message.GetAttempt() != 1 ||
		!bytes.Equal(message.GetContentSha256(), stored.ContentHash[:]) || !stored.TestedAt.Equal(m.Record.Begin.MeasuredAt) || message.GetRecordedAt() == nil {
		t.Errorf("payload: %v", &message)
	}
	for _, o := range stored.Objects {
		content, err := v.Object(o)
		if err != nil {
			t.Fatal(err)
		}
		sum := sha256.Sum256(content)
		switch o.Kind {
		case "part-type":
			if !bytes.Equal(sum[:], message.GetPartType().GetSha256()) || !strings.Contains(string(content), "part_type: TM-25M000-F10") {
				t.Errorf("the limits file is not the one of the record")
			}
		case "calibration":
			var c pb.Calibration
			if err := proto.Unmarshal(content, &c); err != nil || c.GetCalibrationId() != message.GetCalibration().GetCalibrationId() ||
				len(c.GetStandards()) != 3 || len(c.GetStandards()[2].GetSamples().GetRe()) != 11 {
				t.Errorf("the calibration is not the one of the record: %v, error %v", &c, err)
			}
		default:
			t.Errorf("an object of kind %q", o.Kind)
		}
	}
	if len(stored.Objects) != 2 {
		t.Errorf("%d objects, want 2", len(stored.Objects))
	}
	id := m.Record.Begin.ID
	quarter := uint64(time.Date(2026, 11, 30, 9, 30, 0, 0, time.UTC).Unix()/900) | 1<<63
	want := map[string]string{
		"id": string(id[:]), "lot": "L2601", "station": "N1", "quarter": string(binary.BigEndian.AppendUint64(nil, quarter)),
		"unit": texts("production", "TM-25M000-F10", "pocket", "L2601", "C07", "12"),
	}
	for _, term := range stored.Terms {
		if want[string(term.Name)] != string(term.Value) {
			t.Errorf("term %s is %q, want %q", term.Name, term.Value, want[string(term.Name)])
		}
		delete(want, string(term.Name))
	}
	if len(want) > 0 {
		t.Errorf("terms that are missing: %q", want)
	}
	counters, err := v.Counters(nil, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	key := "i" + string(binary.BigEndian.AppendUint64(nil, quarter)) + texts("N1", "TM-25M000-F10", "L2601", "production", "first", "retest")
	if len(counters) != 1 || string(counters[0].Key) != key || !slices.Equal(counters[0].Values, []int64{1}) {
		t.Errorf("counters %v, want %q to be 1", counters, key)
	}
	checkBlock(t, v, m)
}

func texts(list ...string) string {
	var b strings.Builder
	for _, text := range list {
		b.WriteByte(byte(len(text))) // a varint below 128
		b.WriteString(text)
	}
	return b.String()
}

// checkBlock takes the block of the only sweep apart: no frequencies, they are those of the grid; real and imaginary parts.
func checkBlock(t *testing.T, v *volume.Volume, m storagetest.Inspection) {
	blocks, err := v.Samples(1)
	if err != nil || len(blocks) != 1 {
		t.Fatalf("%d blocks, error %v", len(blocks), err)
	}
	rest := blocks[0].Bytes
	d, err := volume.NewDecoder()
	if err != nil {
		t.Fatal(err)
	}
	for i, want := range [][]float64{nil, m.Sweeps[0].Re, m.Sweeps[0].Im} {
		n, width := binary.Uvarint(rest)
		array := rest[width:][:n]
		rest = rest[width:][n:]
		if len(want) == 0 {
			if n != 0 {
				t.Errorf("array %d has %d bytes, want none", i, n)
			}
			continue
		}
		got, err := d.Decode(nil, array, len(want))
		if err != nil {
			t.Fatal(err)
		}
		for k := range want {
			if math.Float64bits(got[k]) != math.Float64bits(want[k]) {
				t.Errorf("array %d, number %d: %x, want %x", i, k, got[k], want[k])
			}
		}
	}
	if len(rest) > 0 {
		t.Errorf("%d bytes too many", len(rest))
	}
}

// TestBlockOfASweepIsChecked cuts and bends a block: a reader gets an error or, never, other numbers without one.
func TestBlockOfASweepIsChecked(t *testing.T) {
	t.Parallel()
	s, plant := plantWith(t)
	m := plant.Inspection(nil)
	blocks, err := s.encodeSweeps(m.Record.Sweeps, m.Sweeps)
	if err != nil {
		t.Fatal(err)
	}
	good := blocks[0].Bytes
	if _, err := s.decodeSweeps(m.Record.Sweeps, blocks); err != nil {
		t.Fatal(err)
	}
	for n := range good {
		blocks[0].Bytes = good[:n]
		if _, err := s.decodeSweeps(m.Record.Sweeps, blocks); err == nil {
			t.Errorf("cut to %d of %d bytes: no error", n, len(good))
		}
	}
	blocks[0].Bytes = append(slices.Clone(good), 0)
	if _, err := s.decodeSweeps(m.Record.Sweeps, blocks); err == nil {
		t.Error("a byte too many: no error")
	}
	blocks[0].Bytes = good
	short := slices.Clone(m.Record.Sweeps)
	short[0].Points--
	if _, err := s.decodeSweeps(short, blocks); err == nil {
		t.Error("a point too many: no error")
	}
	if _, err := s.decodeSweeps(m.Record.Sweeps, nil); err == nil {
		t.Error("no block at all: no error")
	}
}

// clock is set by the test.
type clock struct {
	mu sync.Mutex
	at time.Time
}

func (c *clock) Now() time.Time {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.at
}

func (c *clock) set(t time.Time) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.at = t
}

// TestClockMayJump steps the service's clock about: nothing is lost, refused or repeated, and the order is that of recording.
func TestClockMayJump(t *testing.T) {
	t.Parallel()
	start := time.Date(2026, 11, 30, 9, 0, 0, 0, time.UTC)
	c := &clock{at: start}
	o := Options{Folder: t.TempDir(), Clock: c, VolumeBytes: 192 << 10}
	s, err := open(o, nil)
	if err != nil {
		t.Fatal(err)
	}
	plant := storagetest.NewPlant(t, s)
	var kept []*inspection.Record
	for _, at := range []time.Time{
		start, start.Add(-time.Hour), start.Add(time.Hour), time.Unix(0, 0), time.Date(2040, 1, 1, 0, 0, 0, 0, time.UTC), start.Add(time.Minute),
	} {
		c.set(at)
		r := keep(t, s, plant.Inspection(nil))
		if !r.RecordedAt.Equal(at) {
			t.Errorf("recorded at %v, the clock said %v", r.RecordedAt, at)
		}
		kept = append(kept, r)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if s, err = open(o, nil); err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	got, err := s.After(t.Context(), 0, 100)
	if err != nil || len(got) != len(kept) {
		t.Fatalf("%d records, error %v", len(got), err)
	}
	for i, r := range got {
		if r.Begin.ID != kept[i].Begin.ID || !r.RecordedAt.Equal(kept[i].RecordedAt) || r.Sequence != kept[i].Sequence {
			t.Errorf("place %d: %s with sequence %d, want %s with %d", i, r.Begin.ID, r.Sequence, kept[i].Begin.ID, kept[i].Sequence)
		}
	}
}

// TestWhatCannotBeReadBackIsRefused: a number that is none, or a verdict that is none, never enters the store.
func TestWhatCannotBeReadBackIsRefused(t *testing.T) {
	t.Parallel()
	s, plant := plantWith(t)
	for name, spoil := range map[string]func(*verdict.Judgement){
		"NaN": func(j *verdict.Judgement) { j.Quality = &verdict.Quality{SNRDecibel: math.NaN()} },
		"infinity": func(j *verdict.Judgement) {
			j.Findings = []verdict.Finding{{HasValue: true, Measured: verdict.Value{Value: math.Inf(1)}}}
		},
		"no verdict": func(j *verdict.Judgement) { j.Verdict = "" },
		"not a text": func(j *verdict.Judgement) { j.Remarks = []string{"\xff"} },
	} {
		m := plant.Inspection(nil)
		spoil(&m.Record.Judgement)
		if _, err := s.Record(t.Context(), m.Record, m.Sweeps); inspection.KindOf(err) != inspection.Malformed {
			t.Errorf("%s: error %v", name, err)
		}
	}
	if s.Last() != 0 {
		t.Errorf("last is %d", s.Last())
	}
}

// TestStoreThatIsClosed answers every call with Unavailable, and lets those go who wait.
func TestStoreThatIsClosed(t *testing.T) {
	t.Parallel()
	s, plant := plantWith(t)
	m := plant.Inspection(nil)
	waits := make(chan error, 1)
	go func() { waits <- s.Await(context.Background(), 0) }()
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if err := <-waits; inspection.KindOf(err) != inspection.Unavailable {
		t.Errorf("waiting: %v", err)
	}
	ctx := t.Context()
	for name, call := range map[string]func() error{
		"Record":             func() error { _, err := s.Record(ctx, m.Record, m.Sweeps); return err },
		"Find":               func() error { _, _, err := s.Find(ctx, m.Record.Begin.ID); return err },
		"List":               func() error { _, err := s.List(ctx, inspection.Filter{}, 0, 1); return err },
		"After":              func() error { _, err := s.After(ctx, 0, 1); return err },
		"Sweeps":             func() error { _, err := s.Sweeps(ctx, m.Record.Begin.ID); return err },
		"Count":              func() error { _, err := s.Count(ctx, inspection.CountFilter{}); return err },
		"Status":             func() error { _, err := s.Status(ctx); return err },
		"PartType":           func() error { _, err := s.PartType(ctx, "TM-25M000-F10", 0); return err },
		"Calibration":        func() error { _, _, err := s.Calibration(ctx, "N1-A-2026-11-30"); return err },
		"PublishPartType":    func() error { _, _, err := s.PublishPartType(ctx, plant.Types["TM-25M000-F10"], ""); return err },
		"PublishCalibration": func() error { _, err := s.PublishCalibration(ctx, plant.Calibrated, ""); return err },
	} {
		if err := call(); inspection.KindOf(err) != inspection.Unavailable || !errors.Is(err, ErrClosed) {
			t.Errorf("%s: %v", name, err)
		}
	}
	if err := s.Close(); err != nil {
		t.Errorf("closing twice: %v", err)
	}
}
