package memory

import (
	"cmp"
	"context"
	"slices"

	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
)

// Find returns the record of an id.
func (s *Store) Find(ctx context.Context, id inspection.ID) (*inspection.Record, bool, error) {
	if err := ctx.Err(); err != nil {
		return nil, false, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	r, ok := s.byID[id]
	if !ok {
		return nil, false, nil
	}
	return copyOf(r), true, nil
}

// List returns a page of records, newest first.
func (s *Store) List(ctx context.Context, f inspection.Filter, before uint64, limit int) ([]*inspection.Record, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	from := len(s.records)
	if before > 0 && before <= uint64(from) {
		from = int(before) - 1
	}
	var page []*inspection.Record
	for i := from - 1; i >= 0 && len(page) < limit; i-- {
		if meets(s.records[i], &f) {
			page = append(page, copyOf(s.records[i]))
		}
	}
	return page, nil
}

func meets(r *inspection.Record, f *inspection.Filter) bool {
	b := &r.Begin
	return (f.Serial == "" || b.Unit.Serial == f.Serial) &&
		(f.Lot == "" || b.Unit.Lot == f.Lot) &&
		(f.Station == "" || b.Station == f.Station) &&
		(f.From.IsZero() || !b.MeasuredAt.Before(f.From)) &&
		(f.Until.IsZero() || b.MeasuredAt.Before(f.Until))
}

// After returns the records that follow a sequence, oldest first.
func (s *Store) After(ctx context.Context, sequence uint64, limit int) ([]*inspection.Record, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if sequence >= uint64(len(s.records)) || limit <= 0 {
		return nil, nil
	}
	rest := s.records[sequence:]
	page := make([]*inspection.Record, 0, min(limit, len(rest)))
	for _, r := range rest[:min(limit, len(rest))] {
		page = append(page, copyOf(r))
	}
	return page, nil
}

// Await waits for a record behind the sequence.
func (s *Store) Await(ctx context.Context, sequence uint64) error {
	for {
		s.mu.Lock()
		last, news := uint64(len(s.records)), s.news
		s.mu.Unlock()
		if last > sequence {
			return nil
		}
		select {
		case <-news:
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

// Last returns the newest sequence.
func (s *Store) Last() uint64 {
	s.mu.Lock()
	defer s.mu.Unlock()
	return uint64(len(s.records))
}

// Sweeps returns copies of the raw sweeps of an inspection.
func (s *Store) Sweeps(ctx context.Context, id inspection.ID) ([]sweep.Sweep, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	r, ok := s.byID[id]
	if !ok {
		return nil, inspection.Faultf(inspection.Unknown, "inspection", "there is no inspection %s", id)
	}
	return copySweeps(s.sweeps[r.Sequence-1]), nil
}

// Count adds up the counts that meet the filter, ordered by station, part type, lot and verdict.
func (s *Store) Count(ctx context.Context, f inspection.CountFilter) ([]inspection.Count, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	if f.Purpose == "" {
		f.Purpose = inspection.Production
	}
	from, until := quarterOf(f.From), quarterOf(f.Until)
	if !f.Until.IsZero() && f.Until.Truncate(quarter) != f.Until {
		until++
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	sums := map[inspection.Count]int64{}
	for k, n := range s.counts {
		if k.purpose != f.Purpose ||
			(f.Station != "" && k.station != f.Station) || (f.PartType != "" && k.partType != f.PartType) || (f.Lot != "" && k.lot != f.Lot) ||
			(!f.From.IsZero() && k.quarter < from) || (!f.Until.IsZero() && k.quarter >= until) {
			continue
		}
		sums[inspection.Count{Station: k.station, PartType: k.partType, Lot: k.lot, Verdict: k.verdict}] += n
	}
	counts := make([]inspection.Count, 0, len(sums))
	for c, n := range sums {
		c.Inspections = n
		counts = append(counts, c)
	}
	slices.SortFunc(counts, func(a, b inspection.Count) int {
		return cmp.Or(cmp.Compare(a.Station, b.Station), cmp.Compare(a.PartType, b.PartType), cmp.Compare(a.Lot, b.Lot), cmp.Compare(a.Verdict, b.Verdict))
	})
	return counts, nil
}

// Status describes the store as one open volume. Its sizes are those of the samples, 8 bytes each number.
func (s *Store) Status(ctx context.Context) (inspection.StoreStatus, error) {
	if err := ctx.Err(); err != nil {
		return inspection.StoreStatus{}, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	last := uint64(len(s.records))
	v := inspection.VolumeStatus{Number: 1, Open: true, FirstSequence: min(1, last), LastSequence: last, Inspections: last}
	for i, r := range s.records {
		at := r.Begin.MeasuredAt
		if v.MeasuredFrom.IsZero() || at.Before(v.MeasuredFrom) {
			v.MeasuredFrom = at
		}
		if at.After(v.MeasuredUntil) {
			v.MeasuredUntil = at
		}
		for j := range s.sweeps[i] {
			w := &s.sweeps[i][j]
			v.SampleBytes += 8 * uint64(len(w.FrequencyHz)+len(w.Re)+len(w.Im))
		}
	}
	status := inspection.StoreStatus{Recording: s.fault == nil, Last: last, Inspections: last, Schema: 1, Volumes: []inspection.VolumeStatus{v}}
	if s.fault != nil {
		status.Fault = s.fault.Error()
	}
	return status, nil
}

// OfUnit returns the inspections of one unit held against one part type for one purpose, newest first: those that its attempts are counted by.
func (s *Store) OfUnit(ctx context.Context, purpose inspection.Purpose, unit inspection.UnitID, partType string, limit int) ([]*inspection.Record, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	asked := inspection.Record{Begin: inspection.Begin{Purpose: purpose, Unit: unit}}
	asked.PartType.Name = partType
	key := unitOf(&asked)
	s.mu.Lock()
	defer s.mu.Unlock()
	var page []*inspection.Record
	for i := len(s.records) - 1; i >= 0 && len(page) < limit; i-- {
		if unitOf(s.records[i]) == key {
			page = append(page, copyOf(s.records[i]))
		}
	}
	return page, nil
}
