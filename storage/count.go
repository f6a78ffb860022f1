package storage

import (
	"cmp"
	"context"
	"slices"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
)

// The counters of a volume. Each has one number; the same key in several volumes is one counter, and the sum of all of them counts. A text is
// its length as varint and its bytes, a quarter is 8 bytes as in record.go.
//
//	"i" quarter  text station  text part type  text lot  text purpose  text class  text verdict       inspections
//	"d" quarter  text station  text part type  text lot  text purpose  text class  text disposition   units
//
// quarter, station and lot are those of the inspection. Purpose and verdict are the words of the domain (production, pass). Class is "first" or
// "later" for an inspection that uses up an attempt, by the number of that attempt, and "unused" for one that uses up none: a retest that
// the station alone caused.
//
// Every inspection adds 1 to one "i" counter. The "d" counters tell what became of units (only purpose production disposes of a unit):
// "passed" and "failed" by a verdict pass and fail; by a retest that uses up the last attempt the part type allows, "set-aside" or
// "failed", as its after_last_attempt says. Each inspection of a unit that has a disposition carries one delta that is not negative,
// with the key of the disposition in force after it:
//
//	+1   the inspection reached it; when the unit had another before, or was of another lot, a delta of -1 takes that one back
//	 0   it was in force before, and stays
//
// So the newest inspection of a unit tells its disposition, and a unit counts once, wherever its inspections are stored.
const (
	countedInspections  = 'i'
	countedDispositions = 'd'

	classFirst  = "first"
	classLater  = "later"
	classUnused = "unused"
)

const bucketCounters = "counters" // of a volume, for damage

// Disposition is what finally happens to a unit.
type Disposition string

// The dispositions.
const (
	Passed   Disposition = "passed"
	Failed   Disposition = "failed"
	SetAside Disposition = "set-aside"
)

// counterKey is a counter's key in words; outcome is a verdict or a disposition.
type counterKey struct {
	kind              byte
	quarter           int64
	station, partType string
	lot, purpose      string
	class, outcome    string
}

func (k *counterKey) encode() []byte {
	b := appendQuarter([]byte{k.kind}, k.quarter)
	return appendTexts(b, k.station, k.partType, k.lot, k.purpose, k.class, k.outcome)
}

// decodeCounterKey is the inverse of encode.
func decodeCounterKey(b []byte) (k counterKey, ok bool) {
	if len(b) < 9 || b[0] != countedInspections && b[0] != countedDispositions {
		return k, false
	}
	k.kind, k.quarter = b[0], readQuarter(b[1:9])
	rest := b[9:]
	for _, into := range []*string{&k.station, &k.partType, &k.lot, &k.purpose, &k.class, &k.outcome} {
		if *into, rest, ok = cutText(rest); !ok {
			return k, false
		}
	}
	return k, len(rest) == 0
}

// deltasOf returns what an inspection adds to the counters; before is the unit's disposition in force, nil when it has none.
func deltasOf(r *inspection.Record, decision parttype.Decision, before *counterKey) []volume.Delta {
	key := counterKey{
		kind: countedInspections, quarter: quarterOf(r.Begin.MeasuredAt), station: string(r.Begin.Station), partType: r.PartType.Name,
		lot: string(r.Begin.Unit.Lot), purpose: string(r.Begin.Purpose), class: classOf(r), outcome: string(r.Judgement.Verdict),
	}
	deltas := []volume.Delta{one(&key, 1)}
	if r.Begin.Purpose != inspection.Production {
		return deltas
	}
	now := key
	now.kind, now.outcome = countedDispositions, string(dispositionOf(r, decision))
	switch {
	case before == nil && now.outcome == "":
		return deltas
	case before == nil:
		return append(deltas, one(&now, 1))
	case now.outcome == "" || now.outcome == before.outcome && now.lot == before.lot:
		return append(deltas, one(before, 0))
	}
	return append(deltas, one(before, -1), one(&now, 1))
}

func one(k *counterKey, value int64) volume.Delta {
	return volume.Delta{Key: k.encode(), Values: []int64{value}}
}

func classOf(r *inspection.Record) string {
	switch {
	case !usesAttempt(&r.Judgement):
		return classUnused
	case r.Attempt == 1:
		return classFirst
	}
	return classLater
}

// dispositionOf returns what an inspection decides about its unit, or nothing.
func dispositionOf(r *inspection.Record, decision parttype.Decision) Disposition {
	switch r.Judgement.Verdict {
	case verdict.Pass:
		return Passed
	case verdict.Fail:
		return Failed
	}
	switch {
	case !usesAttempt(&r.Judgement) || r.Attempt < decision.Attempts:
		return ""
	case decision.AfterLastAttempt == parttype.Fail:
		return Failed
	}
	return SetAside
}

// dispositionIn returns the disposition in force that a record's deltas tell; nil: none.
func dispositionIn(deltas []volume.Delta) *counterKey {
	for _, d := range deltas {
		k, ok := decodeCounterKey(d.Key)
		if ok && k.kind == countedDispositions && len(d.Values) == 1 && d.Values[0] >= 0 {
			return &k
		}
	}
	return nil
}

// Count adds up the counts that meet the filter, ordered by station, part type, lot and verdict. Inspections of before and after a call that is
// under way are not mixed up: what it counts is acknowledged when it returns.
func (s *Store) Count(ctx context.Context, f inspection.CountFilter) ([]inspection.Count, error) {
	sums, err := s.sum(ctx, countedInspections, f)
	if err != nil {
		return nil, err
	}
	counts := make([]inspection.Count, 0, len(sums))
	for g, n := range sums {
		counts = append(counts, inspection.Count{Station: g.station, PartType: g.partType, Lot: g.lot, Verdict: verdict.Verdict(g.outcome), Inspections: n})
	}
	slices.SortFunc(counts, func(a, b inspection.Count) int {
		return cmp.Or(cmp.Compare(a.Station, b.Station), cmp.Compare(a.PartType, b.PartType), cmp.Compare(a.Lot, b.Lot), cmp.Compare(a.Verdict, b.Verdict))
	})
	return counts, nil
}

// DispositionCount is how many units of one station, part type and lot ended in one disposition. A unit counts where and when it was reached.
type DispositionCount struct {
	Station     inspection.StationID
	PartType    string
	Lot         inspection.Lot
	Disposition Disposition
	Units       int64
}

// CountDispositions counts units by what became of them, ordered by station, part type, lot and disposition. Only production disposes of units.
func (s *Store) CountDispositions(ctx context.Context, f inspection.CountFilter) ([]DispositionCount, error) {
	sums, err := s.sum(ctx, countedDispositions, f)
	if err != nil {
		return nil, err
	}
	counts := make([]DispositionCount, 0, len(sums))
	for g, n := range sums {
		counts = append(counts, DispositionCount{Station: g.station, PartType: g.partType, Lot: g.lot, Disposition: Disposition(g.outcome), Units: n})
	}
	slices.SortFunc(counts, func(a, b DispositionCount) int {
		return cmp.Or(cmp.Compare(a.Station, b.Station), cmp.Compare(a.PartType, b.PartType), cmp.Compare(a.Lot, b.Lot), cmp.Compare(a.Disposition, b.Disposition))
	})
	return counts, nil
}

// group is what counts are told apart by.
type group struct {
	station  inspection.StationID
	partType string
	lot      inspection.Lot
	outcome  string
}

// sum adds up counters of all volumes; groups whose sum is 0 do not occur.
func (s *Store) sum(ctx context.Context, kind byte, f inspection.CountFilter) (map[group]int64, error) {
	if err := s.check(ctx); err != nil {
		return nil, err
	}
	if f.Purpose == "" {
		f.Purpose = inspection.Production
	}
	tally := tally{filter: f, kind: kind, sums: map[group]int64{}}
	tally.from, tally.until = quarters(f.From, f.Until)
	for _, sh := range s.writer.shelf.all() {
		info := sh.info()
		// A disposition is taken back where the later inspection is stored: any volume may hold deltas of any time.
		if info.Records == 0 || kind == countedInspections && (quarterOf(info.LastTested) < tally.from || quarterOf(info.FirstTested) > tally.until) {
			continue
		}
		if err := s.tally(ctx, sh, &tally); err != nil && !sh.setAside() {
			return nil, err
		}
	}
	for g, n := range tally.sums {
		if n == 0 {
			delete(tally.sums, g)
		}
	}
	return tally.sums, nil
}

// quarters returns the first and the last quarter of a span, rounded outwards; a zero time is an open end.
func quarters(from, until time.Time) (first, last int64) {
	first, last = quarterOf(time.Unix(0, -1<<63)), quarterOf(time.Unix(0, 1<<63-1))
	if !from.IsZero() {
		first = quarterOf(from)
	}
	if !until.IsZero() {
		last = quarterOf(until.Add(-1))
	}
	return first, last
}

// tally adds up counters that meet a filter.
type tally struct {
	filter      inspection.CountFilter
	kind        byte
	from, until int64 // quarters, both included
	sums        map[group]int64
}

// add adds one counter, or one delta. Nothing is added for a key that is not ours.
func (t *tally) add(key []byte, values []int64, sign int64) bool {
	k, ok := decodeCounterKey(key)
	if !ok || len(values) != 1 {
		return false
	}
	f := &t.filter
	if k.kind == t.kind && k.quarter >= t.from && k.quarter <= t.until && k.purpose == string(f.Purpose) &&
		(f.Station == "" || k.station == string(f.Station)) && (f.PartType == "" || k.partType == f.PartType) && (f.Lot == "" || k.lot == string(f.Lot)) {
		t.sums[group{inspection.StationID(k.station), k.partType, inspection.Lot(k.lot), k.outcome}] += sign * values[0]
	}
	return true
}

// tally adds what one volume counts, all of which is acknowledged when it returns. While a commit is on its way to being acknowledged, it waits
// for it. When recording has failed, that never comes, and nothing moves any more: then what is not acknowledged is taken off again.
func (s *Store) tally(ctx context.Context, sh *shelved, into *tally) error {
	if sh.volume == nil {
		return sh.damaged()
	}
	for {
		failed := s.writer.failing()
		part := tally{filter: into.filter, kind: into.kind, from: into.from, until: into.until, sums: map[group]int64{}}
		if err := part.read(ctx, sh); err != nil {
			return err
		}
		newest, err := sh.volume.Records(volume.Newest, 1, volume.Descending)
		if err != nil {
			return err
		}
		done := true
		if last, _ := s.writer.Last(); len(newest) > 0 && newest[0].Sequence > last {
			if failed {
				err = part.takeOff(sh.volume, last)
			} else {
				done, err = s.acknowledged(ctx, newest[0].Sequence)
			}
		}
		if err != nil {
			return err
		}
		if done {
			for g, n := range part.sums {
				into.sums[g] += n
			}
			return nil
		}
	}
}

// read adds all counters of a volume, page by page.
func (t *tally) read(ctx context.Context, sh *shelved) error {
	prefix := []byte{t.kind}
	// Keys of a quarter are longer than this and follow it.
	after := appendQuarter([]byte{t.kind}, t.from)
	for {
		if err := ctx.Err(); err != nil {
			return err
		}
		page, err := sh.volume.Counters(prefix, after, volume.MaxPage)
		if err != nil {
			return err
		}
		for _, c := range page {
			if !t.add(c.Key, c.Values, 1) {
				return &damage.Error{Volume: sh.number, Bucket: bucketCounters, Key: c.Key, Problem: "not a counter of inspections"}
			}
		}
		if len(page) < volume.MaxPage || readQuarter(page[len(page)-1].Key[1:9]) > t.until {
			return nil
		}
		after = page[len(page)-1].Key
	}
}

// takeOff takes off what the records behind last have added.
func (t *tally) takeOff(v *volume.Volume, last uint64) error {
	for {
		page, err := v.Records(last+1, volume.MaxPage, volume.Ascending)
		if err != nil || len(page) == 0 {
			return err
		}
		for _, r := range page {
			for _, d := range r.Deltas {
				t.add(d.Key, d.Values, -1)
			}
			last = r.Sequence
		}
	}
}

// acknowledged waits until the entry with a sequence is acknowledged; false says that recording failed first.
func (s *Store) acknowledged(ctx context.Context, sequence uint64) (bool, error) {
	for {
		last, changed := s.writer.Last()
		if last >= sequence {
			return true, nil
		}
		if s.writer.failing() {
			return false, nil
		}
		// Failing closes no channel; it is looked for now and then.
		pause := time.NewTimer(10 * time.Millisecond)
		select {
		case <-changed:
		case <-pause.C:
		case <-s.stopped:
			pause.Stop()
			return false, closedFault()
		case <-ctx.Done():
			pause.Stop()
			return false, ctx.Err()
		}
		pause.Stop()
	}
}

// failing says whether recording has failed.
func (w *Writer) failing() bool {
	w.mu.Lock()
	defer w.mu.Unlock()
	return w.failed != nil
}
