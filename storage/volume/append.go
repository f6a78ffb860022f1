package volume

import (
	"bytes"
	"crypto/sha256"
	"errors"
	"fmt"
	"os"
	"slices"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/pagefile"
)

// orderedFill is how full pages become where keys only ascend: nothing will be inserted between, so half-empty pages would stay so.
const orderedFill = 0.95

// Append commits entries: the samples of all of them first, then records, indexes, counters and objects in one transaction. After a nil
// error everything is on disk. Sequences must ascend and begin at NextSequence or later.
//
// ErrInvalid: an entry was refused, nothing was written. disk.ErrFull: nothing was recorded; a later Append may succeed, with sequences
// from NextSequence, which may have moved past samples that did get written. Any other error: the volume must be reopened first
// (pagefile.ErrFailed from then on).
func (v *Volume) Append(entries []*Entry) error {
	v.life.RLock()
	defer v.life.RUnlock()
	records, recordsOpen := v.records.(*pagefile.File)
	samples, samplesOpen := v.samples.(*pagefile.File)
	if v.stage != Open || !recordsOpen || !samplesOpen {
		return fmt.Errorf("volume %d is %s: %w", v.identity.number, v.stage, ErrNotOpen)
	}
	next := v.NextSequence()
	for _, e := range entries {
		if err := v.Check(e); err != nil {
			return err
		}
		if e.Sequence < next {
			return invalid("sequence %d, the next is %d", e.Sequence, next)
		}
		next = e.Sequence + 1
	}
	if len(entries) == 0 {
		return nil
	}
	if err := v.appendSamples(samples, entries); err != nil {
		return v.located(err)
	}
	return v.located(v.appendRecords(records, entries))
}

// Check says whether Append would take the entry, but for its sequence. An object the volume does not know yet is hashed: that is the
// costly part, and happens once per object.
func (v *Volume) Check(e *Entry) error {
	if err := e.Validate(); err != nil {
		return err
	}
	for _, o := range e.Objects {
		if !v.knows(ObjectRef{o.Kind, o.Hash}) && sha256.Sum256(o.Bytes) != o.Hash {
			return invalid("object %q: the content does not have hash %x", o.Kind, o.Hash)
		}
	}
	return nil
}

// knows says whether an object is certainly in the volume: written, or seen there, since it was opened.
func (v *Volume) knows(ref ObjectRef) bool {
	v.mu.Lock()
	defer v.mu.Unlock()
	return v.objects[ref]
}

func (v *Volume) appendSamples(file *pagefile.File, entries []*Entry) error {
	last := uint64(0)
	for _, e := range entries {
		if len(e.Samples) > 0 {
			last = e.Sequence
		}
	}
	if last == 0 {
		return nil
	}
	err := file.Update(func(tx *bbolt.Tx) error {
		revision, err := pagefile.Intern(tx, v.options.Revision)
		if err != nil {
			return err
		}
		bucket, err := bucketOf(tx, bucketSamples)
		if err != nil {
			return err
		}
		bucket.FillPercent = orderedFill
		for _, e := range entries {
			for _, s := range e.Samples {
				if err := putSealed(bucket, bucketSamples, sampleKey(e.Sequence, s.Index), revision, s.Bytes); err != nil {
					return err
				}
			}
		}
		return nil
	})
	if err == nil {
		v.mu.Lock()
		v.samplesLast = last
		v.mu.Unlock()
	}
	return err
}

func (v *Volume) appendRecords(file *pagefile.File, entries []*Entry) error {
	v.mu.Lock()
	facts, revision := v.state, v.revision
	facts.age = v.age()
	now := v.options.Clock()
	v.mu.Unlock()
	err := file.Update(func(tx *bbolt.Tx) (err error) {
		if revision == 0 {
			if revision, err = pagefile.Intern(tx, v.options.Revision); err != nil {
				return err
			}
		}
		w := recordWriter{tx: tx, revision: revision, known: v.knows}
		facts, err = w.write(entries, facts)
		return err
	})
	if err != nil {
		return err
	}
	v.mu.Lock()
	defer v.mu.Unlock()
	v.state, v.revision = facts, revision
	for _, e := range entries {
		for _, o := range e.Objects {
			v.objects[ObjectRef{o.Kind, o.Hash}] = true
		}
	}
	// The age up to now is in the state; it goes on from here.
	v.openedAt = now
	return nil
}

// recordWriter puts entries into one transaction of the records file.
type recordWriter struct {
	tx       *bbolt.Tx
	revision uint64
	known    func(ObjectRef) bool
}

func (w recordWriter) write(entries []*Entry, facts state) (state, error) {
	records, err := bucketOf(w.tx, bucketRecords)
	if err != nil {
		return facts, err
	}
	records.FillPercent = orderedFill
	for _, e := range entries {
		if err := putSealed(records, bucketRecords, recordKey(e.Sequence), w.revision, encodeRecord(e)); err != nil {
			return facts, err
		}
		facts = facts.with(e)
	}
	for _, put := range []func([]*Entry) error{w.terms, w.objects, w.counters} {
		if err := put(entries); err != nil {
			return facts, err
		}
	}
	meta, err := bucketOf(w.tx, bucketMeta)
	if err != nil {
		return facts, err
	}
	return facts, putSealed(meta, bucketMeta, []byte(keyState), w.revision, facts.encode())
}

func (w recordWriter) terms(entries []*Entry) error {
	bucket, err := bucketOf(w.tx, bucketTerms)
	if err != nil {
		return err
	}
	var keys [][]byte
	for _, e := range entries {
		for _, t := range e.Terms {
			keys = append(keys, termKey(t, e.Sequence))
		}
	}
	// In key order, neighbours meet the same page while it is at hand.
	slices.SortFunc(keys, bytes.Compare)
	for _, key := range keys {
		if err := putSealed(bucket, bucketTerms, key, w.revision, nil); err != nil {
			return err
		}
	}
	return nil
}

func (w recordWriter) objects(entries []*Entry) error {
	bucket, err := bucketOf(w.tx, bucketObjects)
	if err != nil {
		return err
	}
	for _, e := range entries {
		for _, o := range e.Objects {
			if w.known(ObjectRef{o.Kind, o.Hash}) {
				continue
			}
			key := objectKey(o.Kind, o.Hash)
			if stored := bucket.Get(key); stored != nil {
				// The same hash is the same content, but only if what is stored is still sound.
				if _, err := envelope.Open(bucketObjects, key, stored); err != nil {
					return err
				}
				continue
			}
			if err := putSealed(bucket, bucketObjects, key, w.revision, o.Bytes); err != nil {
				return err
			}
		}
	}
	return nil
}

// counters adds up the deltas of all entries first, so that each counter is read and written once a commit.
func (w recordWriter) counters(entries []*Entry) error {
	bucket, err := bucketOf(w.tx, bucketCounters)
	if err != nil {
		return err
	}
	sums := make(map[string][]int64)
	for _, e := range entries {
		for _, d := range e.Deltas {
			sums[string(d.Key)] = addNumbers(sums[string(d.Key)], d.Values)
		}
	}
	keys := make([]string, 0, len(sums))
	for key := range sums {
		keys = append(keys, key)
	}
	slices.Sort(keys)
	for _, name := range keys {
		key, total := []byte(name), sums[name]
		if stored := bucket.Get(key); stored != nil {
			value, err := envelope.Open(bucketCounters, key, stored)
			if err != nil {
				return err
			}
			before, err := decodeCounter(value.Content)
			if err != nil {
				return &damage.Error{Bucket: bucketCounters, Key: key, Problem: "counter", Cause: err}
			}
			total = addNumbers(before, total)
		}
		if err := putSealed(bucket, bucketCounters, key, w.revision, appendNumbers(nil, total)); err != nil {
			return err
		}
	}
	return nil
}

// addNumbers adds delta to sum number by number; the sum grows where delta is longer.
func addNumbers(sum, delta []int64) []int64 {
	for len(sum) < len(delta) {
		sum = append(sum, 0)
	}
	for i, v := range delta {
		sum[i] += v
	}
	return sum
}

func bucketOf(tx *bbolt.Tx, name string) (*bbolt.Bucket, error) {
	if bucket := tx.Bucket([]byte(name)); bucket != nil {
		return bucket, nil
	}
	return nil, &damage.Error{Bucket: name, Problem: "the bucket is missing"}
}

// Retire ends writing. Readers go on undisturbed. It is the first half of closing a volume; Seal is the second, and may take its time.
func (v *Volume) Retire() error {
	v.life.Lock()
	defer v.life.Unlock()
	if v.stage != Open {
		return nil
	}
	var still [2]*pagefile.Still
	for i, side := range []viewer{v.samples, v.records} {
		file, ok := side.(*pagefile.File)
		if !ok {
			continue
		}
		var err error
		if still[i], err = file.Freeze(); err != nil {
			return v.located(err)
		}
	}
	v.samples, v.records, v.stage = still[0], still[1], Retired
	return nil
}

// forget drops a file from the page cache.
func forget(path string) error {
	file, err := os.Open(path)
	if err != nil {
		return missing(err, path)
	}
	return errors.Join(disk.Forget(file), file.Close())
}
