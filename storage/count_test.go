package storage

import (
	"fmt"
	"reflect"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"pgregory.net/rapid"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
	"example.com/admit/storage/storagetest"
)

// TestDispositions follows one unit through inspections. After each, the unit counts once at most, where its disposition was reached; each
// inspection goes into a volume of its own.
func TestDispositions(t *testing.T) {
	t.Parallel()
	pass := func(m storagetest.Inspection) storagetest.Inspection { return m }
	fail := storagetest.Inspection.Fail
	noisy := func(m storagetest.Inspection) storagetest.Inspection { return m.Retest(verdict.TooNoisy) }
	station := func(m storagetest.Inspection) storagetest.Inspection { return m.Retest(verdict.CalibrationExpired) }
	type step struct {
		station inspection.StationID
		lot     inspection.Lot
		judged  func(storagetest.Inspection) storagetest.Inspection
		want    string // station lot disposition, "" none
	}
	for _, c := range []struct {
		name  string
		steps []step
	}{
		{"passes", []step{{"N1", "L2601", pass, "N1 L2601 passed"}}},
		{"passes at the second attempt", []step{{"N1", "L2601", noisy, ""}, {"N2", "L2601", pass, "N2 L2601 passed"}}},
		{"set aside after the last attempt", []step{{"N1", "L2601", noisy, ""}, {"N2", "L2601", noisy, "N2 L2601 set-aside"}}},
		{"the station's retests use up no attempt", []step{
			{"N1", "L2601", station, ""}, {"N1", "L2601", station, ""}, {"N1", "L2601", noisy, ""}, {"N1", "L2601", station, ""}, {"N2", "L2601", noisy, "N2 L2601 set-aside"},
		}},
		{"overturned", []step{{"N1", "L2601", fail, "N1 L2601 failed"}, {"N2", "L2601", pass, "N2 L2601 passed"}, {"N3", "L2601", fail, "N3 L2601 failed"}}},
		{"stays where it was reached", []step{
			{"N1", "L2601", pass, "N1 L2601 passed"}, {"N2", "L2601", pass, "N1 L2601 passed"}, {"N3", "L2601", station, "N1 L2601 passed"},
			{"N3", "L2601", pass, "N1 L2601 passed"}, {"N4", "L2601", fail, "N4 L2601 failed"},
		}},
		{"moves with the lot", []step{{"N1", "L2601", pass, "N1 L2601 passed"}, {"N2", "L2602", pass, "N2 L2602 passed"}}},
		{"an undecided reading after a verdict is the last attempt", []step{{"N1", "L2601", pass, "N1 L2601 passed"}, {"N2", "L2601", noisy, "N2 L2601 set-aside"}}},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			s, plant := plantWith(t)
			for i, step := range c.steps {
				keep(t, s, step.judged(plant.Inspection(func(b *inspection.Begin) {
					b.Unit.Serial, b.Unit.Lot, b.Station = "TM0000001", step.lot, step.station
					b.MeasuredAt = b.MeasuredAt.Add(time.Duration(i) * time.Hour)
				})))
				// A look for another purpose disposes of nothing.
				keep(t, s, plant.Inspection(func(b *inspection.Begin) {
					b.Unit.Serial, b.Purpose, b.MeasuredAt = "TM0000001", inspection.Engineering, b.MeasuredAt.Add(time.Duration(i)*time.Hour)
				}).Fail())
				if i%2 == 0 {
					if _, err := s.CloseVolume(t.Context()); err != nil {
						t.Fatal(err)
					}
				}
				counts, err := s.CountDispositions(t.Context(), inspection.CountFilter{})
				if err != nil {
					t.Fatal(err)
				}
				got := ""
				for _, d := range counts {
					got += fmt.Sprintf("%s %s %s", d.Station, d.Lot, d.Disposition)
					if d.Units != 1 {
						got += fmt.Sprintf(" (%d units)", d.Units)
					}
				}
				if got != step.want {
					t.Errorf("after inspection %d: %q, want %q", i+1, got, step.want)
				}
			}
			// Hour by hour too: what is taken back is taken back where it was reached.
			got := ""
			for i := range c.steps {
				from := time.Date(2026, 11, 30, 9+i, 0, 0, 0, time.UTC)
				counts, err := s.CountDispositions(t.Context(), inspection.CountFilter{From: from, Until: from.Add(time.Hour)})
				if err != nil {
					t.Fatal(err)
				}
				for _, d := range counts {
					got += fmt.Sprintf("%s %s %s", d.Station, d.Lot, d.Disposition)
				}
			}
			if want := c.steps[len(c.steps)-1].want; got != want {
				t.Errorf("hour by hour: %q, want %q", got, want)
			}
			// Index and counters follow from the records: the volumes check that by themselves.
			for _, sh := range s.writer.shelf.all() {
				if report, err := sh.volume.Verify(t.Context()); err != nil || report.Err() != nil {
					t.Errorf("volume %d: %v, %v", sh.number, err, report.Err())
				}
			}
		})
	}
}

func TestDispositionAfterLastAttempt(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		attempt int
		after   string
		want    Disposition
	}{{1, parttype.Fail, ""}, {2, parttype.Fail, ""}, {3, parttype.Fail, Failed}, {3, parttype.SetAside, SetAside}, {4, parttype.Fail, Failed}} {
		r := &inspection.Record{Attempt: c.attempt, Judgement: verdict.Judgement{Verdict: verdict.Retest}}
		if got := dispositionOf(r, parttype.Decision{Attempts: 3, AfterLastAttempt: c.after}); got != c.want {
			t.Errorf("attempt %d of 3, then %s: %q, want %q", c.attempt, c.after, got, c.want)
		}
	}
}

// TestClasses counts first and later attempts, and those that were not used up, apart.
func TestClasses(t *testing.T) {
	t.Parallel()
	s, plant := plantWith(t)
	unit := func(b *inspection.Begin) { b.Unit.Serial = "TM0000001" }
	keep(t, s, plant.Inspection(unit).Retest(verdict.CalibrationExpired))
	keep(t, s, plant.Inspection(unit).Retest(verdict.TooNoisy))
	keep(t, s, plant.Inspection(unit).Retest(verdict.CalibrationExpired))
	keep(t, s, plant.Inspection(unit))
	counters, err := s.writer.shelf.current().volume.Counters([]byte{countedInspections}, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	got := map[string]int64{}
	for _, c := range counters {
		k, ok := decodeCounterKey(c.Key)
		if !ok {
			t.Fatalf("key %q", c.Key)
		}
		got[k.class+" "+k.outcome] += c.Values[0]
	}
	if want := map[string]int64{"unused retest": 2, "first retest": 1, "later pass": 1}; !reflect.DeepEqual(got, want) {
		t.Errorf("got %v, want %v", got, want)
	}
}

func TestCounterKey(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		text := rapid.StringN(0, 20, 128)
		k := counterKey{
			kind: rapid.SampledFrom([]byte{countedInspections, countedDispositions}).Draw(t, "kind"), quarter: rapid.Int64().Draw(t, "quarter"),
			station: text.Draw(t, "station"), partType: text.Draw(t, "type"), lot: text.Draw(t, "lot"), purpose: text.Draw(t, "purpose"),
			class: text.Draw(t, "class"), outcome: text.Draw(t, "outcome"),
		}
		b := k.encode()
		if back, ok := decodeCounterKey(b); !ok || back != k {
			t.Fatalf("%+v came back as %+v", k, back)
		}
		if cut := rapid.IntRange(0, len(b)-1).Draw(t, "cut"); true {
			if _, ok := decodeCounterKey(b[:cut]); ok {
				t.Fatalf("%q is taken for a key", b[:cut])
			}
		}
		// Bytes that are none must not be taken for more than they hold.
		decodeCounterKey(rapid.SliceOf(rapid.Byte()).Draw(t, "noise"))
	})
}

// TestCountWhileRecording counts beside four recorders: what was acknowledged before is in it, what was not sent is not, and nothing
// is counted that is not acknowledged when the count returns.
func TestCountWhileRecording(t *testing.T) {
	t.Parallel()
	s, plant := plantWith(t)
	const recorders = 4
	each := 40
	if testing.Short() {
		each = 10
	}
	var list [recorders][]storagetest.Inspection
	for i := range list {
		for range each {
			list[i] = append(list[i], plant.Inspection(nil))
		}
	}
	var sent, acknowledged atomic.Int64
	var all sync.WaitGroup
	for i := range list {
		all.Go(func() {
			for _, m := range list[i] {
				sent.Add(1)
				if _, err := s.Record(t.Context(), m.Record, m.Sweeps); err != nil {
					t.Error(err)
					return
				}
				acknowledged.Add(1)
			}
		})
	}
	done := make(chan struct{})
	go func() { all.Wait(); close(done) }()
	rounds := 0
	for open := true; open; rounds++ {
		select {
		case <-done:
			open = false
		default:
		}
		least := acknowledged.Load()
		counts, err := s.Count(t.Context(), inspection.CountFilter{})
		last := s.Last()
		most := sent.Load()
		if err != nil {
			t.Fatal(err)
		}
		n := int64(0)
		for _, c := range counts {
			n += c.Inspections
		}
		if n < least || n > most || uint64(n) > last {
			t.Fatalf("counted %d: %d were acknowledged before, %d sent, the last sequence is %d", n, least, most, last)
		}
	}
	if got := acknowledged.Load(); got != int64(recorders*each) || rounds < 3 {
		t.Errorf("%d recorded, %d counts", got, rounds)
	}
}
