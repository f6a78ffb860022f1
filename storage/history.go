package storage

import (
	"context"

	"example.com/admit/service/inspection"
	"example.com/admit/storage/volume"
)

// The compiler holds the store to the port.
var _ inspection.History = (*Store)(nil)

// OfUnit returns the inspections of one unit held against one part type for one purpose, newest first: those that its attempts are counted by.
func (s *Store) OfUnit(ctx context.Context, purpose inspection.Purpose, unit inspection.UnitID, partType string, limit int) ([]*inspection.Record, error) {
	if err := s.check(ctx); err != nil {
		return nil, err
	}
	asked := inspection.Record{Begin: inspection.Begin{Purpose: purpose, Unit: unit}}
	asked.PartType.Name = partType
	term := unitTerm(&asked)
	top, _ := s.writer.Last()
	var page []*inspection.Record
	for _, sh := range s.newestFirst() {
		if len(page) >= limit {
			break
		}
		q := query{filter: &inspection.Filter{}, shelved: sh, top: top, limit: limit - len(page)}
		found, err := q.ofTerm(ctx, term)
		if err != nil && !sh.setAside() {
			return nil, err
		}
		page = append(page, found...)
	}
	return page, nil
}

// ofTerm returns the records of one volume that carry a term.
func (q *query) ofTerm(ctx context.Context, term volume.Term) ([]*inspection.Record, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	if info := q.shelved.info(); info.Records == 0 || info.FirstSequence > q.top {
		return nil, nil
	}
	if q.shelved.volume == nil {
		return nil, q.unreadable()
	}
	if !q.shelved.volume.MayHold(term) {
		return nil, nil
	}
	sequences, err := q.shelved.volume.ByTerm(term, q.top, q.limit, volume.Descending)
	if err != nil {
		return nil, err
	}
	var page []*inspection.Record
	for _, sequence := range sequences {
		record, err := q.shelved.volume.Record(sequence)
		if err != nil {
			return nil, err
		}
		r, err := decodeRecord(q.shelved.number, record)
		if err != nil {
			return nil, err
		}
		page = append(page, r)
	}
	return page, nil
}
