package storage

import (
	"errors"
	"fmt"

	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
)

// round is one commit while it is put together.
type round struct {
	writer  *Writer
	volumes []*shelved // newest first
	drafts  []draft
	byID    map[string]int // place in drafts
	late    []follower
	// damage to the open volume, met while drafting, and the submissions that were not looked at any more because of it
	damage error
	rest   []*waiting

	// byTerm finds drafts by term; it covers the first indexed drafts, and is extended only when somebody asks.
	byTerm  map[string][]int
	indexed int
}

// draft is an entry that will be committed.
type draft struct {
	item  *waiting
	entry *volume.Entry
}

// follower is a submission whose id is that of a draft: what becomes of it is known after the commit.
type follower struct {
	item    *waiting
	of      int
	differs bool
}

// recorded is an entry found by its id.
type recorded struct {
	record volume.Record
	volume uint64
}

// find looks an id up in all volumes, newest first. An error says that some volume that may hold it cannot be read: then nobody can tell, and
// recording it might count it twice.
func (r *round) find(id []byte) (recorded, bool, error) {
	term := volume.Term{Name: r.writer.options.IDTerm, Value: id}
	for i, s := range r.volumes {
		if s.volume == nil {
			if err := r.judgeUnreadable(s, term); err != nil {
				return recorded{}, false, err
			}
			continue
		}
		if !s.volume.MayHold(term) {
			continue
		}
		sequences, err := s.volume.ByTerm(term, 0, 1, volume.Ascending)
		if err == nil && len(sequences) == 0 {
			continue
		}
		var record volume.Record
		if err == nil {
			record, err = s.volume.Record(sequences[0])
		}
		switch {
		case err == nil:
			return recorded{record, s.number}, true, nil
		case s.setAside():
			// The operator chose to go on without what cannot be read of it.
			continue
		case i == 0 && errors.Is(err, damage.ErrDamaged):
			r.damage = err
		}
		return recorded{}, false, fmt.Errorf("whether %x was recorded cannot be told: %w", id, err)
	}
	return recorded{}, false, nil
}

// judgeUnreadable decides about a volume that could not even be opened. The filter of a closed one may still rule the id out.
func (r *round) judgeUnreadable(s *shelved, term volume.Term) error {
	switch {
	case s.setAside():
		return nil
	case s.filter == nil:
		return fmt.Errorf("whether %x was recorded cannot be told: %w", term.Value, s.damaged())
	}
	if may, err := s.filter.MayHold(term); may || err != nil {
		return fmt.Errorf("whether %x was recorded cannot be told: %w", term.Value, errors.Join(s.damaged(), err))
	}
	return nil
}

// Newest implements Lookup.
func (r *round) Newest(term volume.Term, limit int) ([]volume.Record, error) {
	if limit <= 0 || limit > volume.MaxPage {
		limit = volume.MaxPage
	}
	var records []volume.Record
	places := r.drafted(term)
	for i := len(places) - 1; i >= 0 && len(records) < limit; i-- {
		records = append(records, r.drafts[places[i]].entry.Record(r.writer.options.Revision))
	}
	var errs []error
	for _, s := range r.volumes {
		if len(records) >= limit {
			break
		}
		if s.volume == nil {
			errs = append(errs, s.damaged())
			continue
		}
		if !s.volume.MayHold(term) {
			continue
		}
		found, err := newestIn(s.volume, term, limit-len(records))
		records = append(records, found...)
		errs = append(errs, err)
	}
	return records, errors.Join(errs...)
}

func newestIn(v *volume.Volume, term volume.Term, limit int) ([]volume.Record, error) {
	sequences, err := v.ByTerm(term, volume.Newest, limit, volume.Descending)
	if err != nil {
		return nil, err
	}
	records := make([]volume.Record, 0, len(sequences))
	for _, sequence := range sequences {
		record, err := v.Record(sequence)
		if err != nil {
			return records, err
		}
		records = append(records, record)
	}
	return records, nil
}

// drafted returns the places of drafts that carry a term, oldest first.
func (r *round) drafted(term volume.Term) []int {
	if r.byTerm == nil {
		r.byTerm = make(map[string][]int)
	}
	for ; r.indexed < len(r.drafts); r.indexed++ {
		for _, t := range r.drafts[r.indexed].entry.Terms {
			key := termText(t)
			if places := r.byTerm[key]; len(places) == 0 || places[len(places)-1] != r.indexed {
				r.byTerm[key] = append(places, r.indexed)
			}
		}
	}
	return r.byTerm[termText(term)]
}

func termText(t volume.Term) string {
	return fmt.Sprintf("%d %s%s", len(t.Name), t.Name, t.Value)
}
