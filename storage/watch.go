package storage

import (
	"context"

	"example.com/admit/service/inspection"
	"example.com/admit/storage/volume"
)

// Last returns the sequence of the newest record.
func (s *Store) Last() uint64 {
	last, _ := s.writer.Last()
	return last
}

// Await waits for a record behind the sequence. A store that is closed meanwhile answers with a Fault of kind Unavailable.
func (s *Store) Await(ctx context.Context, sequence uint64) error {
	for {
		last, changed := s.writer.Last()
		if last > sequence {
			return nil
		}
		select {
		case <-changed:
		case <-s.stopped:
			return closedFault()
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

// After returns the records that follow a sequence, oldest first.
func (s *Store) After(ctx context.Context, sequence uint64, limit int) ([]*inspection.Record, error) {
	if err := s.check(ctx); err != nil {
		return nil, err
	}
	last, _ := s.writer.Last()
	var page []*inspection.Record
	for _, sh := range s.writer.shelf.all() {
		if len(page) >= limit || sequence >= last {
			break
		}
		info := sh.info()
		if info.Records == 0 || info.LastSequence <= sequence {
			continue
		}
		found, err := following(ctx, sh, sequence, last, limit-len(page))
		if err != nil && !sh.setAside() {
			return nil, err
		}
		page = append(page, found...)
	}
	return page, nil
}

// following returns records of one volume behind sequence, up to last.
func following(ctx context.Context, sh *shelved, sequence, last uint64, limit int) ([]*inspection.Record, error) {
	if sh.volume == nil {
		return nil, sh.damaged()
	}
	var found []*inspection.Record
	for len(found) < limit {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		page, err := sh.volume.Records(sequence+1, limit-len(found), volume.Ascending)
		if err != nil || len(page) == 0 {
			return found, err
		}
		for _, stored := range page {
			if stored.Sequence > last {
				return found, nil
			}
			r, err := decodeRecord(sh.number, stored)
			if err != nil {
				return found, err
			}
			found = append(found, r)
			sequence = stored.Sequence
		}
	}
	return found, nil
}
