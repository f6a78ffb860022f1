package storagetest

import (
	"context"
	"errors"
	"math"
	"slices"
	"sync"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

func recordAndFind(s *scene) {
	before := time.Now()
	m := s.Inspection(nil)
	kept := s.keep(m)
	s.same("the answer", m.as(kept), kept)
	if kept.Sequence != 1 || kept.Attempt != 1 || s.Last() != 1 {
		s.Errorf("sequence %d, attempt %d, last %d: want 1, 1, 1", kept.Sequence, kept.Attempt, s.Last())
	}
	if kept.RecordedAt.Location() != time.UTC || kept.RecordedAt.Before(before.Add(-time.Hour)) || kept.RecordedAt.After(time.Now().Add(time.Hour)) {
		s.Errorf("recorded at %v: want about %v in UTC", kept.RecordedAt, before.UTC())
	}
	s.same("what is found", kept, s.find(m.Record.Begin.ID))
	if _, ok, err := s.Find(s.Context(), newID(77)); ok || err != nil {
		s.Errorf("finding an id that was never sent: ok %v, error %v", ok, err)
	}
	next := s.keep(s.Inspection(nil))
	if next.Sequence <= kept.Sequence || s.Last() != next.Sequence {
		s.Errorf("the next sequence is %d, last %d, after %d", next.Sequence, s.Last(), kept.Sequence)
	}
}

// sentAgain: the same inspection any number of times is one record and one count, and gets one answer.
func sentAgain(s *scene) {
	m := s.Inspection(nil)
	first := s.keep(m)
	s.keep(s.Inspection(nil))
	for i := range 100 {
		// Another judgement of the same content, as a later revision of the program would give it, changes nothing.
		again := *m.Record
		again.Judgement, again.Software = verdict.Judgement{Verdict: verdict.Fail}, "revision 2"
		got, err := s.Record(s.Context(), &again, m.Sweeps)
		if err != nil || !got.Already {
			s.Fatalf("time %d: already %v, error %v", i+2, got.Already, err)
		}
		s.same("the answer", first, got.Record)
	}
	s.counted(inspection.CountFilter{}, map[verdict.Verdict]int64{verdict.Pass: 2})
	if s.Last() != 2 {
		s.Errorf("last is %d, want 2", s.Last())
	}
}

func otherContent(s *scene) {
	m := s.Inspection(nil)
	first := s.keep(m)
	other := s.Inspection(func(b *inspection.Begin) { b.ID = m.Record.Begin.ID })
	_, err := s.Record(s.Context(), other.Record, other.Sweeps)
	s.refused("other content under the same id", err, inspection.Conflict, m.Record.Begin.ID.String())
	s.same("the first", first, s.find(m.Record.Begin.ID))
	s.counted(inspection.CountFilter{}, map[verdict.Verdict]int64{verdict.Pass: 1})
}

// fiftyAtOnce sends one inspection fifty times at once.
func fiftyAtOnce(s *scene) {
	m := s.Inspection(nil)
	const n = 50
	var answers [n]inspection.Recorded
	var faults [n]error
	var all sync.WaitGroup
	for i := range n {
		all.Go(func() {
			r := *m.Record
			answers[i], faults[i] = s.Record(s.Context(), &r, m.Sweeps)
		})
	}
	all.Wait()
	fresh := 0
	kept := s.find(m.Record.Begin.ID)
	for i := range n {
		if faults[i] != nil {
			s.Fatalf("sender %d: %v", i, faults[i])
		}
		if !answers[i].Already {
			fresh++
		}
		s.same("the answer", kept, answers[i].Record)
	}
	if fresh != 1 {
		s.Errorf("%d senders were told that theirs was the first, want 1", fresh)
	}
	s.counted(inspection.CountFilter{}, map[verdict.Verdict]int64{verdict.Pass: 1})
}

// fiftyOfOneUnit sends fifty inspections of one unit at once: the attempts are counted in the order of recording.
func fiftyOfOneUnit(s *scene) {
	const n = 50
	list := make([]Inspection, n)
	for i := range list {
		list[i] = s.Inspection(func(b *inspection.Begin) { b.Unit.Serial = "TM0000001" }).Retest(verdict.TooNoisy)
	}
	records := make([]*inspection.Record, n)
	var all sync.WaitGroup
	for i, m := range list {
		all.Go(func() {
			kept, err := s.Record(s.Context(), m.Record, m.Sweeps)
			if err != nil {
				s.Errorf("inspection %d: %v", i, err)
				return
			}
			records[i] = kept.Record
		})
	}
	all.Wait()
	if s.Failed() {
		return
	}
	slices.SortFunc(records, func(a, b *inspection.Record) int { return int(a.Sequence) - int(b.Sequence) })
	for i, r := range records {
		if r.Attempt != i+1 {
			s.Errorf("recorded in place %d: attempt %d", i+1, r.Attempt)
		}
	}
	s.counted(inspection.CountFilter{}, map[verdict.Verdict]int64{verdict.Retest: n})
}

// refusals: nothing is kept that is not whole or could not be traced to its limits and its calibration.
func refusals(s *scene) {
	for _, c := range []struct {
		name  string
		kind  inspection.Kind
		spoil func(*Inspection)
	}{
		{"part type not published", inspection.Unknown, func(m *Inspection) { m.Record.PartType.Name = "TM-50M000-T3" }},
		{"version not published", inspection.Unknown, func(m *Inspection) { m.Record.PartType.Version = 2 }},
		{"other limits than published", inspection.Unknown, func(m *Inspection) { m.Record.PartType.Hash[3] ^= 1 }},
		{"calibration not published", inspection.Unknown, func(m *Inspection) { m.Record.Begin.Calibration = "N1-A-2026-12-01" }},
		{"other calibration than published", inspection.Unknown, func(m *Inspection) { m.Record.CalibrationHash[3] ^= 1 }},
		{"no station", inspection.Malformed, func(m *Inspection) { m.Record.Begin.Station = "" }},
		{"unknown purpose", inspection.Malformed, func(m *Inspection) { m.Record.Begin.Purpose = "fun" }},
		{"not measured", inspection.Malformed, func(m *Inspection) { m.Record.Begin.MeasuredAt = time.Time{} }},
		{"a sweep missing", inspection.Malformed, func(m *Inspection) { m.Sweeps = nil }},
		{"a point missing", inspection.Malformed, func(m *Inspection) { m.Sweeps[0].Re = m.Sweeps[0].Re[1:] }},
	} {
		m := s.Inspection(nil)
		c.spoil(&m)
		_, err := s.Record(s.Context(), m.Record, m.Sweeps)
		s.refused(c.name, err, c.kind)
		if _, ok, err := s.Find(s.Context(), m.Record.Begin.ID); ok || err != nil {
			s.Errorf("%s: found afterwards: %v, error %v", c.name, ok, err)
		}
	}
	ended, cancel := context.WithCancel(s.Context())
	cancel()
	m := s.Inspection(nil)
	if _, err := s.Record(ended, m.Record, m.Sweeps); !errors.Is(err, context.Canceled) {
		s.Errorf("a context that has ended: error %v", err)
	}
	if s.Last() != 0 {
		s.Errorf("last is %d after nothing was kept", s.Last())
	}
	s.counted(inspection.CountFilter{}, map[verdict.Verdict]int64{})
}

// callerKeepsItsBuffers: the caller fills its buffers anew as soon as its call returns, and may do what it likes with what it is given.
func callerKeepsItsBuffers(s *scene) {
	m := s.Inspection(nil)
	want := mainSweep(int(s.made))
	s.keep(m)
	spoil := func(sweeps []sweep.Sweep) {
		for i := range sweeps {
			for k := range sweeps[i].Re {
				sweeps[i].FrequencyHz[k], sweeps[i].Re[k], sweeps[i].Im[k] = -1, -2, -3
			}
		}
	}
	spoil(m.Sweeps)
	for range 2 {
		got, err := s.Sweeps(s.Context(), m.Record.Begin.ID)
		if err != nil {
			s.Fatal(err)
		}
		s.same("sweeps", []sweep.Sweep{want}, got)
		spoil(got)
	}
	s.find(m.Record.Begin.ID).Begin.Station = "S4"
	if r := s.find(m.Record.Begin.ID); r.Begin.Station != "N1" {
		s.Errorf("the station has become %s", r.Begin.Station)
	}
}

// attempts: every inspection uses up one, save a retest of which the station alone is the cause; unit by unit, part type by part type.
func attempts(s *scene) {
	second := PartType(s, partTypeName, 2, "second")
	if _, _, err := s.PublishPartType(s.Context(), second, "engineer"); err != nil {
		s.Fatal(err)
	}
	serial := func(serial string) func(*inspection.Begin) {
		return func(b *inspection.Begin) { b.Unit.Serial = inspection.Serial(serial) }
	}
	pocket := func(lot inspection.Lot, carrier string, pocket int) func(*inspection.Begin) {
		return func(b *inspection.Begin) { b.Unit = inspection.UnitID{Lot: lot, Carrier: carrier, Pocket: pocket} }
	}
	both := func(changes ...func(*inspection.Begin)) func(*inspection.Begin) {
		return func(b *inspection.Begin) {
			for _, c := range changes {
				c(b)
			}
		}
	}
	otherLot := func(b *inspection.Begin) { b.Unit.Lot = "L2602" }
	otherType := func(b *inspection.Begin) { b.PartType.Name = otherTypeName }
	otherStation := func(b *inspection.Begin) { b.Station = "S2" }
	counted := func(b *inspection.Begin) { b.Unit.Attempt = 7 }
	for i, c := range []struct {
		change func(*inspection.Begin)
		judged func(Inspection) Inspection
		want   int
	}{
		{serial("TM1"), func(m Inspection) Inspection { return m.Retest(verdict.CalibrationExpired) }, 1}, // uses up none
		{serial("TM1"), func(m Inspection) Inspection { return m.Retest(verdict.CalibrationExpired, verdict.ReferenceUnlocked) }, 1},
		{serial("TM1"), func(m Inspection) Inspection { return m.Retest(verdict.CalibrationExpired, verdict.TooNoisy) }, 1},
		{both(serial("TM1"), otherLot), Inspection.Fail, 2}, // a serial is the unit, whatever the lot
		{both(serial("TM1"), otherStation), nil, 3},         // at whatever station
		{serial("TM2"), nil, 1},                                                 // another unit
		{both(serial("TM1"), otherType), nil, 1},                                // another part type
		{both(serial("TM1"), counted), nil, 4},                                  // whatever the station counts
		{serial("TM1"), func(m Inspection) Inspection { return m.Retest() }, 5}, // a retest without a cause is nobody's fault but the unit's
		{serial("TM1"), func(m Inspection) Inspection {
			m.Record.PartType.Version, m.Record.PartType.Hash = 2, second.Hash()
			return m
		}, 6}, // the next version of the part type goes on
		{pocket("L2601", "C07", 12), Inspection.Fail, 1},
		{pocket("L2601", "C07", 12), nil, 2},
		{pocket("L2601", "C07", 1), nil, 1},
		{pocket("L2601", "C071", 2), nil, 1}, // not pocket 12 of C07
		{pocket("L2602", "C07", 12), nil, 1},
	} {
		m := s.Inspection(c.change)
		if c.judged != nil {
			m = c.judged(m)
		}
		if r := s.keep(m); r.Attempt != c.want {
			s.Errorf("inspection %d, %s: attempt %d, want %d", i, m.Record.Begin.Unit.Name(), r.Attempt, c.want)
		}
	}
}

// purposes: only the purpose that was asked for is counted, and a look at a unit for another purpose takes no attempt away from production.
func purposes(s *scene) {
	unit := func(p inspection.Purpose) func(*inspection.Begin) {
		return func(b *inspection.Begin) { b.Purpose, b.Unit.Serial = p, "TM0000001" }
	}
	for i, p := range inspection.Purposes() {
		for n := range i + 1 {
			if r := s.keep(s.Inspection(unit(p))); r.Attempt != n+1 {
				s.Errorf("%s, inspection %d: attempt %d", p, n+1, r.Attempt)
			}
		}
	}
	for i, p := range inspection.Purposes() {
		s.counted(inspection.CountFilter{Purpose: p}, map[verdict.Verdict]int64{verdict.Pass: int64(i + 1)})
	}
	s.counted(inspection.CountFilter{}, map[verdict.Verdict]int64{verdict.Pass: 1})
}

// sweepsBitExact: what came is what comes back, bit for bit, with and without a grid, complex or magnitude.
func sweepsBitExact(s *scene) {
	odd := []float64{math.Copysign(0, -1), 0, math.SmallestNonzeroFloat64, -math.SmallestNonzeroFloat64, 0x1p-1030, -0x1.fffffffffffffp-1023,
		1e12, -1e12, 1.0 / 3, math.Nextafter(1, 2), float64(math.MaxInt32), 1e-300}
	// rotated returns the odd values from one of them on.
	rotated := func(from int) []float64 { return append(slices.Clone(odd[from:]), odd[:from]...) }
	falling := &sweep.Grid{StartHz: 25.01e6, StopHz: 24.99e6, Points: len(odd)}
	onGrid := make([]float64, len(odd))
	for i := range onGrid {
		onGrid[i] = falling.At(i)
	}
	offGrid := slices.Clone(onGrid)
	offGrid[5] = math.Nextafter(offGrid[5], 0)
	positive := make([]float64, len(odd))
	for i, v := range odd {
		positive[i] = math.Abs(v)
	}
	plain := sweep.Sweep{Role: sweep.Main, Quantity: sweep.S21, FrequencyHz: onGrid, Re: odd, Im: rotated(3)}
	with := func(change func(*sweep.Sweep)) sweep.Sweep {
		w := plain
		change(&w)
		return w
	}
	sweeps := []sweep.Sweep{
		plain,
		with(func(w *sweep.Sweep) { w.Grid = falling }),
		with(func(w *sweep.Sweep) { w.Grid, w.FrequencyHz = falling, offGrid }),
		with(func(w *sweep.Sweep) { w.Quantity, w.Re, w.Im = sweep.S21Magnitude, positive, nil }),
		with(func(w *sweep.Sweep) {
			w.Role, w.DriveStep, w.SourcePowerDBm = sweep.Drive, 3, ptr(math.Copysign(0, -1))
		}),
		with(func(w *sweep.Sweep) {
			w.Role, w.FrequencyRatio = sweep.Overtone, 6.27
			w.Timing = sweep.Timing{Dwell: 1234567, Averaging: 7, LeadIn: 123, Phase: sweep.PhaseRestarted}
		}),
		with(func(w *sweep.Sweep) { w.Role, w.Order, w.Quantity = sweep.Overtone, 3, sweep.Impedance }),
		mainSweep(4),
	}
	b := s.Inspection(nil).Record.Begin
	m := s.of(b, sweeps, verdict.Judgement{Verdict: verdict.Pass})
	kept := s.keep(m)
	s.same("the record", m.as(kept), s.find(b.ID))
	got, err := s.Sweeps(s.Context(), b.ID)
	if err != nil {
		s.Fatal(err)
	}
	s.same("sweeps", sweeps, got)
	if inspection.ContentHash(&kept.Begin, got) != kept.ContentHash {
		s.Error("the content that came back does not have the recorded hash")
	}
	_, err = s.Sweeps(s.Context(), newID(77))
	s.refused("sweeps of an id that was never sent", err, inspection.Unknown, newID(77).String())
}

// restart: everything is there afterwards, and what is sent again is known.
func restart(s *scene) {
	backend, ok := s.Backend.(restarter)
	if !ok {
		s.Skip("this backend keeps nothing beyond its life")
	}
	var all []Inspection
	var kept []*inspection.Record
	for i := range 40 {
		m := s.Inspection(func(b *inspection.Begin) { b.Unit.Serial = inspection.Serial("TM000000" + string(rune('0'+i%8))) })
		if i%3 == 0 {
			m = m.Retest(verdict.TooNoisy)
		}
		all, kept = append(all, m), append(kept, s.keep(m))
	}
	counts, err := s.Count(s.Context(), inspection.CountFilter{})
	if err != nil {
		s.Fatal(err)
	}
	s.Backend = backend.Restart(s.T)
	if s.Last() != kept[len(kept)-1].Sequence {
		s.Errorf("last is %d, was %d", s.Last(), kept[len(kept)-1].Sequence)
	}
	for i, m := range all {
		s.same("the record", kept[i], s.find(m.Record.Begin.ID))
		sweeps, err := s.Sweeps(s.Context(), m.Record.Begin.ID)
		if err != nil {
			s.Fatal(err)
		}
		s.same("sweeps", m.Sweeps, sweeps)
		again, err := s.Record(s.Context(), m.Record, m.Sweeps)
		if err != nil || !again.Already {
			s.Fatalf("sent again: already %v, error %v", again.Already, err)
		}
		s.same("the answer", kept[i], again.Record)
	}
	recounted, err := s.Count(s.Context(), inspection.CountFilter{})
	if err != nil {
		s.Fatal(err)
	}
	s.same("counts", counts, recounted)
	var p *parttype.PartType
	if p, err = s.PartType(s.Context(), partTypeName, 0); err != nil {
		s.Fatal(err)
	}
	s.same("part type", s.Types[partTypeName], p)
	_, hash, err := s.Calibration(s.Context(), "N1-A-2026-11-30")
	if err != nil || hash != inspection.CalibrationHash(s.Calibrated) {
		s.Errorf("calibration: hash %x, error %v", hash, err)
	}
	next := s.Inspection(func(b *inspection.Begin) { b.Unit.Serial = "TM0000007" })
	if r := s.keep(next); r.Sequence <= kept[len(kept)-1].Sequence || r.Attempt != 6 {
		s.Errorf("the next record has sequence %d and attempt %d, want one above %d and 6", r.Sequence, r.Attempt, kept[len(kept)-1].Sequence)
	}
}
