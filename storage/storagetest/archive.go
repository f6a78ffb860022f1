package storagetest

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"reflect"
	"slices"
	"testing"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
)

// counted wants the counts that meet a filter to add up to these, verdict by verdict.
func (s *scene) counted(f inspection.CountFilter, want map[verdict.Verdict]int64) {
	s.Helper()
	counts, err := s.Count(s.Context(), f)
	if err != nil {
		s.Errorf("count: %v", err)
		return
	}
	got := map[verdict.Verdict]int64{}
	for _, c := range counts {
		got[c.Verdict] += c.Inspections
	}
	s.same(fmt.Sprintf("count of %+v", f), want, got)
}

// countsByQuarter looks at the edges of quarters of an hour: a time on the edge belongs to the quarter that it begins.
func countsByQuarter(s *scene) {
	at := func(d time.Duration) { s.keep(s.Inspection(func(b *inspection.Begin) { b.MeasuredAt = day.Add(d) })) }
	at(0)
	at(15*time.Minute - 1)
	at(15 * time.Minute)
	at(29 * time.Minute)
	at(30 * time.Minute)
	at(24 * time.Hour)
	zone := time.FixedZone("UTC+5:45", 5*3600+45*60)
	for _, c := range []struct {
		name        string
		from, until time.Time
		want        int64
	}{
		{"everything", time.Time{}, time.Time{}, 6},
		{"the first quarter", day, day.Add(15 * time.Minute), 2},
		{"rounded outwards", day.Add(14 * time.Minute), day.Add(15*time.Minute + 1), 4},
		{"within one quarter", day.Add(16 * time.Minute), day.Add(17 * time.Minute), 2},
		{"from on", day.Add(15 * time.Minute), time.Time{}, 4},
		{"until", time.Time{}, day.Add(30 * time.Minute), 4},
		{"until an instant later", time.Time{}, day.Add(30*time.Minute + 1), 5},
		{"where nothing is", day.Add(time.Hour), day.Add(2 * time.Hour), 0},
		{"in a zone of odd quarters", day.In(zone), day.Add(15 * time.Minute).In(zone), 2},
	} {
		want := map[verdict.Verdict]int64{}
		if c.want > 0 {
			want[verdict.Pass] = c.want
		}
		s.Run(c.name, func(t *testing.T) {
			inner := *s
			inner.T = t
			inner.counted(inspection.CountFilter{From: c.from, Until: c.until}, want)
		})
	}
}

// size returns how many inspections make a crowd: n, or a third of them in short mode.
func size(n int) int {
	if testing.Short() {
		return n / 3
	}
	return n
}

// crowd records n inspections of few units, lots and stations in a random order of measuring, and returns the records.
func (s *scene) crowd(random *rand.Rand, n int) []*inspection.Record {
	var all []*inspection.Record
	for range n {
		m := s.Inspection(func(b *inspection.Begin) {
			b.Station = inspection.StationID([]string{"N1", "N2", "S1"}[random.IntN(3)])
			b.PartType.Name = []string{partTypeName, otherTypeName}[random.IntN(2)]
			b.Unit = inspection.UnitID{Serial: inspection.Serial(fmt.Sprintf("TM%07d", random.IntN(12))), Lot: inspection.Lot(fmt.Sprintf("L260%d", random.IntN(3)))}
			if random.IntN(4) == 0 {
				b.Unit.Serial, b.Unit.Carrier, b.Unit.Pocket = "", "C07", 1+random.IntN(3)
			}
			if random.IntN(8) == 0 && b.Unit.Serial != "" {
				b.Unit.Lot = ""
			}
			b.Purpose = []inspection.Purpose{inspection.Production, inspection.Production, inspection.Check}[random.IntN(3)]
			// Spooled inspections arrive late: measuring and recording are two orders.
			b.MeasuredAt = day.Add(time.Duration(random.IntN(3*3600)) * time.Second)
			if random.IntN(30) == 0 {
				b.MeasuredAt = b.MeasuredAt.AddDate(-40, 0, 0) // the station's clock had lost its battery
			}
		})
		switch random.IntN(3) {
		case 0:
			m = m.Fail()
		case 1:
			m = m.Retest(verdict.TooNoisy)
		}
		all = append(all, s.keep(m))
	}
	return all
}

// countsAgainstModel holds counts against those of a plain list.
func countsAgainstModel(s *scene) {
	random := rand.New(rand.NewPCG(3, 1))
	records := s.crowd(random, size(150))
	for range 200 {
		f := inspection.CountFilter{
			Station: pick(random, inspection.StationID(""), "N1", "S4"), PartType: pick(random, "", partTypeName), Lot: pick(random, inspection.Lot(""), "L2601"),
			Purpose: pick(random, inspection.Purpose(""), inspection.Check, inspection.Study),
		}
		purpose := cmp.Or(f.Purpose, inspection.Production)
		if random.IntN(3) > 0 {
			f.From = day.Add(time.Duration(random.IntN(12)) * 15 * time.Minute)
		}
		if random.IntN(3) > 0 {
			f.Until = day.Add(time.Duration(random.IntN(12)) * 15 * time.Minute)
		}
		sums := map[inspection.Count]int64{}
		for _, r := range records {
			b := r.Begin
			if b.Purpose == purpose && (f.Station == "" || b.Station == f.Station) && (f.PartType == "" || r.PartType.Name == f.PartType) &&
				(f.Lot == "" || b.Unit.Lot == f.Lot) && (f.From.IsZero() || !b.MeasuredAt.Before(f.From)) && (f.Until.IsZero() || b.MeasuredAt.Before(f.Until)) {
				sums[inspection.Count{Station: b.Station, PartType: r.PartType.Name, Lot: b.Unit.Lot, Verdict: r.Judgement.Verdict}]++
			}
		}
		var want []inspection.Count
		for c, n := range sums {
			c.Inspections = n
			want = append(want, c)
		}
		slices.SortFunc(want, func(a, b inspection.Count) int {
			return cmp.Or(cmp.Compare(a.Station, b.Station), cmp.Compare(a.PartType, b.PartType), cmp.Compare(a.Lot, b.Lot), cmp.Compare(a.Verdict, b.Verdict))
		})
		got, err := s.Count(s.Context(), f)
		if err != nil {
			s.Fatal(err)
		}
		if !slices.Equal(want, got) {
			s.Fatalf("count of %+v:\ngot  %v\nwant %v", f, got, want)
		}
	}
}

func pick[T any](random *rand.Rand, from ...T) T { return from[random.IntN(len(from))] }

// listAgainstModel holds pages of lists, of every mixture of filters, against a plain list.
func listAgainstModel(s *scene) {
	random := rand.New(rand.NewPCG(4, 1))
	records := s.crowd(random, size(200))
	slices.Reverse(records)
	hits := 0
	for range 400 {
		f := inspection.Filter{
			Serial:  pick(random, inspection.Serial(""), "", inspection.Serial(fmt.Sprintf("TM%07d", random.IntN(13)))),
			Lot:     pick(random, inspection.Lot(""), inspection.Lot(fmt.Sprintf("L260%d", random.IntN(4)))),
			Station: pick(random, inspection.StationID(""), "N1", "N2", "S4"),
		}
		if random.IntN(2) == 0 {
			f.From = day.Add(time.Duration(random.IntN(3*3600)) * time.Second)
		}
		if random.IntN(2) == 0 {
			f.Until = day.Add(time.Duration(random.IntN(3*3600))*time.Second + 1)
		}
		var want []*inspection.Record
		for _, r := range records {
			b := r.Begin
			if (f.Serial == "" || b.Unit.Serial == f.Serial) && (f.Lot == "" || b.Unit.Lot == f.Lot) && (f.Station == "" || b.Station == f.Station) &&
				(f.From.IsZero() || !b.MeasuredAt.Before(f.From)) && (f.Until.IsZero() || b.MeasuredAt.Before(f.Until)) {
				want = append(want, r)
			}
		}
		hits += len(want)
		var got []*inspection.Record
		most := 1 + random.IntN(60)
		for before := uint64(0); ; {
			page, err := s.List(s.Context(), f, before, most)
			if err != nil {
				s.Fatal(err)
			}
			got = append(got, page...)
			if len(page) < most {
				break
			}
			before = page[len(page)-1].Sequence
		}
		if !slices.Equal(sequences(want), sequences(got)) {
			s.Fatalf("list of %+v in pages of %d:\ngot  %v\nwant %v", f, most, sequences(got), sequences(want))
		}
		if !reflect.DeepEqual(want, got) && len(want) > 0 {
			s.same("the listed records", want, got)
		}
	}
	if hits < size(4000) {
		s.Errorf("the filters met %d records in all: too few to prove anything", hits)
	}
	if page, err := s.List(s.Context(), inspection.Filter{}, 0, 0); err != nil || len(page) > 0 {
		s.Errorf("a page of none: %d records, error %v", len(page), err)
	}
}

// after follows the records in pages, from every place.
func after(s *scene) {
	if page, err := s.After(s.Context(), 0, 10); err != nil || len(page) > 0 {
		s.Errorf("before anything is recorded: %d records, error %v", len(page), err)
	}
	records := s.crowd(rand.New(rand.NewPCG(5, 1)), size(60))
	for from := 0; from <= len(records); from += 7 {
		at := uint64(0)
		if from > 0 {
			at = records[from-1].Sequence
		}
		var got []*inspection.Record
		for {
			page, err := s.After(s.Context(), at, 11)
			if err != nil {
				s.Fatal(err)
			}
			if got = append(got, page...); len(page) == 0 {
				break
			}
			at = page[len(page)-1].Sequence
		}
		s.same("what follows", records[from:], got)
	}
	if page, err := s.After(s.Context(), s.Last()+1000, 10); err != nil || len(page) > 0 {
		s.Errorf("behind the newest: %d records, error %v", len(page), err)
	}
}

// await: those who wait hear of the next record, and of nothing else.
func await(s *scene) {
	ended, cancel := context.WithTimeout(s.Context(), 20*time.Millisecond)
	defer cancel()
	if err := s.Await(ended, 0); !errors.Is(err, context.DeadlineExceeded) {
		s.Errorf("waiting where nothing comes: %v", err)
	}
	const watchers, inspections = 5, 10
	heard := make(chan []uint64, watchers)
	for range watchers {
		go func() {
			var all []uint64
			defer func() { heard <- all }()
			for at := uint64(0); len(all) < inspections; {
				if err := s.Await(s.Context(), at); err != nil {
					s.Errorf("waiting: %v", err)
					return
				}
				page, err := s.After(s.Context(), at, 3)
				if err != nil || len(page) == 0 {
					s.Errorf("after %d, which was awaited: %d records, error %v", at, len(page), err)
					return
				}
				all = append(all, sequences(page)...)
				at = all[len(all)-1]
			}
		}()
	}
	var want []uint64
	for range inspections {
		want = append(want, s.keep(s.Inspection(nil)).Sequence)
	}
	for range watchers {
		s.same("what a watcher heard", want, <-heard)
	}
	if err := s.Await(s.Context(), want[0]); err != nil {
		s.Errorf("waiting for what is there: %v", err)
	}
}

func status(s *scene) {
	st, err := s.Status(s.Context())
	if err != nil {
		s.Fatal(err)
	}
	if !st.Recording || st.Fault != "" || st.Last != 0 || st.Inspections != 0 || st.Schema != 1 {
		s.Errorf("an empty store: %+v", st)
	}
	records := s.crowd(rand.New(rand.NewPCG(6, 1)), 50)
	if st, err = s.Status(s.Context()); err != nil {
		s.Fatal(err)
	}
	first, last := records[0].Begin.MeasuredAt, records[0].Begin.MeasuredAt
	for _, r := range records {
		if r.Begin.MeasuredAt.Before(first) {
			first = r.Begin.MeasuredAt
		}
		if r.Begin.MeasuredAt.After(last) {
			last = r.Begin.MeasuredAt
		}
	}
	var inspections, sampleBytes uint64
	from, until := time.Time{}, time.Time{}
	open := 0
	for i, v := range st.Volumes {
		if v.Number == 0 || i > 0 && v.Number <= st.Volumes[i-1].Number {
			s.Errorf("volume %d stands in place %d", v.Number, i+1)
		}
		if v.Open {
			open++
		}
		if v.Inspections == 0 {
			continue
		}
		inspections += v.Inspections
		sampleBytes += v.SampleBytes
		if from.IsZero() || v.MeasuredFrom.Before(from) {
			from = v.MeasuredFrom
		}
		if v.MeasuredUntil.After(until) {
			until = v.MeasuredUntil
		}
	}
	if st.Last != s.Last() || st.Inspections != 50 || inspections != 50 || sampleBytes == 0 || open != 1 || !from.Equal(first) || !until.Equal(last) {
		s.Errorf("got %+v, want 50 inspections measured %v to %v, the last with sequence %d", st, first, last, s.Last())
	}
}
