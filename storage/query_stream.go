package storage

import (
	"encoding/binary"
	"errors"
	"sort"

	"example.com/admit/storage/volume"
)

// stream gives the sequences of one volume that an index holds, in falling order.
type stream interface {
	// below returns the highest sequence at or below limit. Limits must not rise from call to call.
	below(limit uint64) (sequence uint64, ok bool, err error)
}

// agreed returns the highest sequence at or below limit that all streams hold: each is asked in turn for what it has at or below the lowest
// answer so far, until all have given the same. The rarest stream comes first and sets the pace, whatever the others hold.
func agreed(streams []stream, limit uint64) (uint64, bool, error) {
	for same := 0; ; {
		for _, s := range streams {
			sequence, ok, err := s.below(limit)
			if err != nil || !ok {
				return 0, false, err
			}
			if sequence < limit {
				limit, same = sequence, 0
			}
			if same++; same >= len(streams) {
				return limit, true, nil
			}
		}
	}
}

// firstPage is how much of an index is read at first; each further page is four times as long. Many questions are answered by one record.
const firstPage = 16

// termStream is what the index holds of one term.
type termStream struct {
	volume *volume.Volume
	term   volume.Term
	page   []uint64 // falling
	size   int
	ended  bool // nothing lies behind page
}

func (s *termStream) below(limit uint64) (uint64, bool, error) {
	for {
		s.page = s.page[sort.Search(len(s.page), func(i int) bool { return s.page[i] <= limit }):]
		if len(s.page) > 0 {
			return s.page[0], true, nil
		}
		if s.ended {
			return 0, false, nil
		}
		s.size = min(max(firstPage, 4*s.size), volume.MaxPage)
		var err error
		if s.page, err = s.volume.ByTerm(s.term, limit, s.size, volume.Descending); err != nil {
			return 0, false, err
		}
		s.ended = len(s.page) < s.size
	}
}

// anyOf is the union of streams.
type anyOf []stream

func (s anyOf) below(limit uint64) (highest uint64, found bool, err error) {
	for _, one := range s {
		sequence, ok, err := one.below(limit)
		if err != nil {
			return 0, false, err
		}
		if ok {
			highest, found = max(highest, sequence), true
		}
	}
	return highest, found, nil
}

// errQuarter says that an index entry of a quarter is none.
var errQuarter = errors.New("an entry of the index of times is not a quarter of an hour")

// maxQuarters is how many quarters of an hour are looked up one by one: ten days. A longer part of a volume is read through.
const maxQuarters = 960

// quarterStreams returns the records of a span of quarters, both ends included; nil when there are too many of them to ask for each.
func quarterStreams(v *volume.Volume, from, until int64) (stream, error) {
	within := anyOf{}
	for from <= until {
		hits, err := v.ByRange(volume.Range{
			Name: []byte(termQuarter), Low: appendQuarter(nil, from), High: appendQuarter(nil, until), Order: volume.Ascending, Limit: 1,
		})
		if err != nil {
			return nil, err
		}
		if len(hits) == 0 {
			return within, nil
		}
		value := hits[0].Value
		if len(value) != binary.Size(from) {
			return nil, errQuarter
		}
		if len(within) == maxQuarters {
			return nil, nil
		}
		within = append(within, &termStream{volume: v, term: volume.Term{Name: []byte(termQuarter), Value: value}})
		from = readQuarter(value) + 1
	}
	return within, nil
}
