package volume

import (
	"errors"
	"fmt"
	"reflect"
	"testing"

	"github.com/google/go-cmp/cmp"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/envelope"
)

func crc(b []byte) uint32 { return envelope.Checksum(b) }

// diff describes a difference. Comparing long byte slices is slow in cmp, so equality is settled first.
func diff(want, got any) string {
	if reflect.DeepEqual(want, got) {
		return ""
	}
	return cmp.Diff(want, got)
}

// ledger is what a volume should hold, kept by the test.
type ledger struct {
	entries  []*Entry
	counters map[string][]int64
}

func ledgerOf(n uint64) ledger {
	l := ledger{counters: make(map[string][]int64)}
	for s := uint64(1); s <= n; s++ {
		e := entry(s)
		l.entries = append(l.entries, e)
		for _, d := range e.Deltas {
			l.counters[string(d.Key)] = addNumbers(l.counters[string(d.Key)], d.Values)
		}
	}
	return l
}

// outcome of reading a whole volume that may be damaged.
type outcome struct {
	damaged int      // calls that reported damage
	absent  []string // what was not found, though it was written
	wrong   []string // what came back different, or failed otherwise
}

func (o *outcome) judge(what string, err error, difference func() string) {
	switch {
	case errors.Is(err, damage.ErrDamaged):
		o.damaged++
		var found *damage.Error
		if !errors.As(err, &found) || found.Volume != 7 || !found.HasPage && found.Key == nil && found.File == "" {
			o.wrong = append(o.wrong, fmt.Sprintf("%s: the damage does not say where: %v", what, err))
		}
	case errors.Is(err, ErrNotFound):
		o.absent = append(o.absent, what)
	case err != nil:
		o.wrong = append(o.wrong, fmt.Sprintf("%s: %v", what, err))
	default:
		if d := difference(); d != "" {
			o.wrong = append(o.wrong, what+": "+d)
		}
	}
}

// readAll asks for everything in every way and judges the answers.
func (l ledger) readAll(v *Volume) outcome {
	var o outcome
	for _, e := range l.entries {
		record, err := v.Record(e.Sequence)
		o.judge(fmt.Sprintf("record %d", e.Sequence), err, func() string { return diff(asRecord(e), record) })
		samples, err := v.Samples(e.Sequence)
		o.judge(fmt.Sprintf("samples %d", e.Sequence), err, func() string { return diff(e.Samples, samples) })
		for _, t := range e.Terms[:2] {
			from, order := e.Sequence, Ascending
			if e.Sequence%2 == 0 {
				order = Descending
			}
			if !v.MayHold(t) {
				o.absent = append(o.absent, fmt.Sprintf("term %s by the filter", t.Value))
			}
			got, err := v.ByTerm(t, from, 1, order)
			if err == nil && len(got) == 0 {
				err = ErrNotFound
			}
			o.judge(fmt.Sprintf("term %s", t.Value), err, func() string { return diff([]uint64{e.Sequence}, got) })
		}
		ref := ObjectRef{e.Objects[0].Kind, e.Objects[0].Hash}
		object, err := v.Object(ref)
		o.judge(fmt.Sprintf("object %x", ref.Hash[:4]), err, func() string { return diff(e.Objects[0].Bytes, object) })
	}
	counters := make(map[string][]int64)
	page, err := v.Counters(nil, nil, MaxPage)
	for _, c := range page {
		counters[string(c.Key)] = c.Values
	}
	o.judge("counters", err, func() string { return diff(l.counters, counters) })
	return o
}

// holds reports what must not be.
func (o outcome) holds(t *testing.T, what string) {
	t.Helper()
	for _, w := range o.wrong {
		t.Errorf("%s: wrong: %s", what, w)
	}
	if len(o.absent) > 0 {
		t.Errorf("%s: silently absent: %v", what, o.absent)
	}
}
