package storage

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
	"example.com/admit/storage/volume"
)

// Find returns the record of an id. When a damaged volume may hold the id, absence is not certain, and the answer is an error.
func (s *Store) Find(ctx context.Context, id inspection.ID) (*inspection.Record, bool, error) {
	at, found, err := s.locate(ctx, id)
	if err != nil || !found {
		return nil, false, err
	}
	r, err := decodeRecord(at.volume, at.record)
	return r, err == nil, err
}

// locate finds the stored record of an id.
func (s *Store) locate(ctx context.Context, id inspection.ID) (recorded, bool, error) {
	if err := s.check(ctx); err != nil {
		return recorded{}, false, err
	}
	last, _ := s.writer.Last()
	r := &round{writer: s.writer, volumes: s.newestFirst()}
	at, found, err := r.find(id[:])
	if err != nil || !found || at.record.Sequence > last {
		return recorded{}, false, err
	}
	return at, true, nil
}

func (s *Store) newestFirst() []*shelved {
	volumes := s.writer.shelf.all()
	slices.Reverse(volumes)
	return volumes
}

// Sweeps returns the raw sweeps of an inspection, bit for bit.
func (s *Store) Sweeps(ctx context.Context, id inspection.ID) ([]sweep.Sweep, error) {
	at, found, err := s.locate(ctx, id)
	switch {
	case err != nil:
		return nil, err
	case !found:
		return nil, inspection.Faultf(inspection.Unknown, "inspection", "there is no inspection %s", id)
	}
	r, err := decodeRecord(at.volume, at.record)
	if err != nil {
		return nil, err
	}
	v, err := s.writer.Volume(at.volume)
	if err != nil {
		return nil, err
	}
	blocks, err := v.Samples(at.record.Sequence)
	if errors.Is(err, volume.ErrNoSamples) {
		return nil, inspection.Faultf(inspection.Unknown, "inspection", "the samples of %s are no longer kept: %w", id, err)
	}
	if err != nil {
		return nil, fmt.Errorf("samples of inspection %s: %w", id, err)
	}
	sweeps, err := s.decodeSweeps(r.Sweeps, blocks)
	if err != nil {
		return nil, brokenRecord(at.volume, r.Sequence, "samples", err)
	}
	return sweeps, nil
}

// List returns a page of records, newest first. Volumes are asked from the newest back, until the page is full; what certainly cannot meet the
// filter, by its range of times or the filter of a closed volume, is not read.
func (s *Store) List(ctx context.Context, f inspection.Filter, before uint64, limit int) ([]*inspection.Record, error) {
	if err := s.check(ctx); err != nil {
		return nil, err
	}
	top, _ := s.writer.Last()
	if before > 0 {
		top = min(top, before-1)
	}
	var page []*inspection.Record
	for _, sh := range s.newestFirst() {
		if len(page) >= limit || top == 0 {
			break
		}
		q := query{filter: &f, shelved: sh, top: top, limit: limit - len(page)}
		found, err := q.run(ctx)
		if err != nil && !sh.setAside() {
			return nil, err
		}
		page = append(page, found...)
	}
	return page, nil
}

// query looks for records in one volume: newest first, from sequence top down.
type query struct {
	filter  *inspection.Filter
	shelved *shelved
	top     uint64
	limit   int
}

func (q *query) run(ctx context.Context) ([]*inspection.Record, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	info := q.shelved.info()
	if info.Records == 0 || info.FirstSequence > q.top || !overlaps(q.filter, info) {
		return nil, nil
	}
	if q.shelved.volume == nil {
		return nil, q.unreadable()
	}
	for _, t := range q.terms() {
		if !q.shelved.volume.MayHold(t) {
			return nil, nil
		}
	}
	streams, err := q.streams(info)
	if err != nil {
		return nil, err
	}
	if len(streams) == 0 {
		return q.scan(ctx)
	}
	return q.seek(ctx, streams)
}

// unreadable returns what is wrong with a volume that cannot be opened, unless its filter tells that nothing in it can meet the filter.
func (q *query) unreadable() error {
	for _, t := range q.terms() {
		if q.shelved.filter == nil {
			break
		}
		if may, err := q.shelved.filter.MayHold(t); err == nil && !may {
			return nil
		}
	}
	return q.shelved.damaged()
}

// overlaps says whether a volume may hold records of the filter's span of time.
func overlaps(f *inspection.Filter, info volume.Info) bool {
	return (f.From.IsZero() || !info.LastTested.Before(f.From)) && (f.Until.IsZero() || info.FirstTested.Before(f.Until))
}

// covers says whether all records of a volume lie in the filter's span of time.
func covers(f *inspection.Filter, info volume.Info) bool {
	return (f.From.IsZero() || !info.FirstTested.Before(f.From)) && (f.Until.IsZero() || info.LastTested.Before(f.Until))
}

// terms returns the terms that a record must carry to meet the filter, the rarest first.
func (q *query) terms() []volume.Term {
	var terms []volume.Term
	for _, t := range []struct{ name, value string }{
		{termSerial, string(q.filter.Serial)}, {termLot, string(q.filter.Lot)}, {termStation, string(q.filter.Station)},
	} {
		if t.value != "" {
			terms = append(terms, textTerm(t.name, t.value))
		}
	}
	return terms
}

// streams returns what narrows the search down by the index. None: every record may meet the filter.
func (q *query) streams(info volume.Info) ([]stream, error) {
	var streams []stream
	for _, t := range q.terms() {
		if len(t.Value) > volume.MaxTermValue {
			return []stream{&termStream{ended: true}}, nil
		}
		streams = append(streams, &termStream{volume: q.shelved.volume, term: t})
	}
	// A serial leaves so little that the time is looked at faster in the records themselves.
	if q.filter.Serial != "" || covers(q.filter, info) {
		return streams, nil
	}
	from, until := quarters(q.filter.From, q.filter.Until)
	within, err := quarterStreams(q.shelved.volume, from, until)
	if err != nil || within == nil {
		return streams, err
	}
	return append(streams, within), nil
}

// scan reads record by record.
func (q *query) scan(ctx context.Context) ([]*inspection.Record, error) {
	var found []*inspection.Record
	for from := q.top; from > 0 && len(found) < q.limit; {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		page, err := q.shelved.volume.Records(from, q.limit-len(found), volume.Descending)
		if err != nil || len(page) == 0 {
			return found, err
		}
		for _, stored := range page {
			if found, err = q.take(found, stored); err != nil {
				return found, err
			}
			from = stored.Sequence - 1
		}
	}
	return found, nil
}

// seek reads the records that all streams agree on.
func (q *query) seek(ctx context.Context, streams []stream) ([]*inspection.Record, error) {
	var found []*inspection.Record
	for from := q.top; from > 0 && len(found) < q.limit; {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		sequence, ok, err := agreed(streams, from)
		if err != nil || !ok {
			return found, err
		}
		stored, err := q.shelved.volume.Record(sequence)
		if err != nil {
			return found, fmt.Errorf("inspection with sequence %d: %w", sequence, err)
		}
		if found, err = q.take(found, stored); err != nil {
			return found, err
		}
		from = sequence - 1
	}
	return found, nil
}

// take adds a stored record that meets the filter.
func (q *query) take(found []*inspection.Record, stored volume.Record) ([]*inspection.Record, error) {
	// The time stands outside the payload: what is out of it need not be taken apart.
	if !inSpan(q.filter, stored.TestedAt) {
		return found, nil
	}
	r, err := decodeRecord(q.shelved.number, stored)
	if err != nil {
		return found, err
	}
	b := &r.Begin
	if (q.filter.Serial != "" && b.Unit.Serial != q.filter.Serial) || (q.filter.Lot != "" && b.Unit.Lot != q.filter.Lot) ||
		(q.filter.Station != "" && b.Station != q.filter.Station) {
		return found, nil
	}
	return append(found, r), nil
}

func inSpan(f *inspection.Filter, t time.Time) bool {
	return (f.From.IsZero() || !t.Before(f.From)) && (f.Until.IsZero() || t.Before(f.Until))
}
