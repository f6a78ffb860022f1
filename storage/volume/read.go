package volume

import (
	"bytes"
	"encoding/binary"
	"math"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// MaxPage is the most a reading call returns at once, whatever limit it is given: read transactions stay short. Go on from the last
// item for more.
const MaxPage = 1000

// maxPageBytes ends a page early where items are large.
const maxPageBytes = 8 << 20

// Order of reading.
type Order = pagefile.Order

// The two orders.
const (
	Ascending  = pagefile.Ascending
	Descending = pagefile.Descending
)

// Newest is the start of a descending read from the end.
const Newest = uint64(math.MaxUint64)

// Hit is one entry of the index.
type Hit struct {
	Value    []byte
	Sequence uint64
}

// Counter is a counter with the sum of all deltas it was given in this volume.
type Counter struct {
	Key    []byte
	Values []int64
}

// view runs read on the records file with the volume held in its stage.
func (v *Volume) view(read func(*tree.Reader) error) error {
	v.life.RLock()
	defer v.life.RUnlock()
	return v.located(v.records.View(read))
}

// Record returns the record with a sequence number, or ErrNotFound.
func (v *Volume) Record(sequence uint64) (Record, error) {
	var record Record
	err := v.view(func(r *tree.Reader) error {
		value, found, err := pagefile.Get(r, bucketRecords, recordKey(sequence))
		if err != nil {
			return err
		}
		if !found {
			return ErrNotFound
		}
		record, err = v.decode(r, sequence, value)
		return err
	})
	return record, err
}

// Records returns up to limit records from sequence start on, in the given order. Fewer than asked for, but at least one, may come even
// though there are more; none says that there are no more.
func (v *Volume) Records(start uint64, limit int, order Order) ([]Record, error) {
	var records []Record
	err := v.view(func(r *tree.Reader) error {
		var size int
		return pagefile.Walk(r, bucketRecords, recordKey(start), order, anyKey, func(key, stored []byte) (bool, error) {
			if len(records) >= page(limit) || size > maxPageBytes {
				return false, nil
			}
			if len(key) != 8 {
				return false, &damage.Error{Bucket: bucketRecords, Key: key, Problem: "not a sequence number"}
			}
			value, err := envelope.Open(bucketRecords, key, stored)
			if err != nil {
				return false, err
			}
			record, err := v.decode(r, binary.BigEndian.Uint64(key), value)
			if err != nil {
				return false, err
			}
			records = append(records, record)
			size += len(stored)
			return true, nil
		})
	})
	return records, err
}

func (v *Volume) decode(r *tree.Reader, sequence uint64, value envelope.Value) (Record, error) {
	record, err := decodeRecord(sequence, value.Content)
	if err != nil {
		return Record{}, &damage.Error{Bucket: bucketRecords, Key: recordKey(sequence), Problem: "record", Cause: err}
	}
	record.Schema = value.Schema
	record.Revision, err = v.revisionText(r, value.Revision)
	return record, err
}

func (v *Volume) revisionText(r *tree.Reader, number uint64) (string, error) {
	v.mu.Lock()
	text, known := v.revisions[number]
	v.mu.Unlock()
	if known {
		return text, nil
	}
	text, err := pagefile.Revision(r, number)
	if err != nil {
		return "", err
	}
	v.mu.Lock()
	defer v.mu.Unlock()
	v.revisions[number] = text
	return text, nil
}

// ByTerm returns the sequences of up to limit records that carry the term, from start on: ascending those at or after it, descending
// (from Newest, say) those at or before it.
func (v *Volume) ByTerm(term Term, start uint64, limit int, order Order) ([]uint64, error) {
	prefix := termPrefix(term.Name, term.Value)
	var sequences []uint64
	err := v.view(func(r *tree.Reader) error {
		from := binary.BigEndian.AppendUint64(bytes.Clone(prefix), start)
		within := func(key []byte) bool { return bytes.HasPrefix(key, prefix) }
		return pagefile.Walk(r, bucketTerms, from, order, within, func(key, stored []byte) (bool, error) {
			hit, err := openHit(key, stored)
			sequences = append(sequences, hit.Sequence)
			return len(sequences) < page(limit), err
		})
	})
	return sequences, err
}

// Range selects the index entries of one term name with values in Low..High, both included; a nil High has no upper end. After, where
// set, is the last hit of the page before.
type Range struct {
	Name      []byte
	Low, High []byte
	After     *Hit
	Order     Order
	Limit     int
}

// ByRange returns one page of a range, ordered by value and then sequence. Times stored as big-endian numbers come in order of time.
func (v *Volume) ByRange(query Range) ([]Hit, error) {
	name := appendEscaped(nil, query.Name)
	low := appendEscaped(bytes.Clone(name), query.Low)
	// Behind every value of this name, or behind the last sequence of the highest value.
	end := append(bytes.Clone(name[:len(name)-1]), 2)
	if query.High != nil {
		end = binary.BigEndian.AppendUint64(appendEscaped(bytes.Clone(name), query.High), math.MaxUint64)
	}
	from := low
	if query.Order == Descending {
		from = end
	}
	var skip []byte
	if query.After != nil {
		skip = termKey(Term{query.Name, query.After.Value}, query.After.Sequence)
		from = skip
	}
	var hits []Hit
	err := v.view(func(r *tree.Reader) error {
		within := func(key []byte) bool { return bytes.Compare(key, low) >= 0 && bytes.Compare(key, end) <= 0 }
		return pagefile.Walk(r, bucketTerms, from, query.Order, within, func(key, stored []byte) (bool, error) {
			if skip != nil && bytes.Equal(key, skip) {
				return true, nil
			}
			hit, err := openHit(key, stored)
			hits = append(hits, hit)
			return len(hits) < page(query.Limit), err
		})
	})
	return hits, err
}

// openHit checks an index entry and takes its key apart.
func openHit(key, stored []byte) (Hit, error) {
	if _, err := envelope.Open(bucketTerms, key, stored); err != nil {
		return Hit{}, err
	}
	term, sequence, err := parseTermKey(key)
	return Hit{Value: term.Value, Sequence: sequence}, err
}

// Counters returns up to limit counters whose key begins with prefix, in key order, after the key after (nil: from the first).
func (v *Volume) Counters(prefix, after []byte, limit int) ([]Counter, error) {
	from := prefix
	if bytes.Compare(after, prefix) > 0 {
		from = after
	}
	if len(from) == 0 {
		from = []byte{0} // keys are not empty, and a seek needs something
	}
	var counters []Counter
	err := v.view(func(r *tree.Reader) error {
		within := func(key []byte) bool { return bytes.HasPrefix(key, prefix) }
		return pagefile.Walk(r, bucketCounters, from, Ascending, within, func(key, stored []byte) (bool, error) {
			if after != nil && bytes.Equal(key, after) {
				return true, nil
			}
			values, err := openCounter(key, stored)
			counters = append(counters, Counter{Key: key, Values: values})
			return len(counters) < page(limit), err
		})
	})
	return counters, err
}

func openCounter(key, stored []byte) ([]int64, error) {
	value, err := envelope.Open(bucketCounters, key, stored)
	if err != nil {
		return nil, err
	}
	values, err := decodeCounter(value.Content)
	if err != nil {
		return nil, &damage.Error{Bucket: bucketCounters, Key: key, Problem: "counter", Cause: err}
	}
	return values, nil
}

// Object returns the content of an object, or ErrNotFound.
func (v *Volume) Object(ref ObjectRef) ([]byte, error) {
	var content []byte
	err := v.view(func(r *tree.Reader) error {
		value, found, err := pagefile.Get(r, bucketObjects, objectKey(ref.Kind, ref.Hash))
		if err == nil && !found {
			err = ErrNotFound
		}
		content = value.Content
		return err
	})
	return content, err
}

// Samples returns sample blocks of a record, all of them or those with the given indexes, each held against what the record says of it.
// ErrNotFound: no such record, or it has no such block. ErrNoSamples: retention dropped them.
func (v *Volume) Samples(sequence uint64, indexes ...uint32) ([]SampleBlock, error) {
	record, err := v.Record(sequence)
	if err != nil {
		return nil, err
	}
	refs := record.Samples
	if len(indexes) > 0 {
		if refs, err = selectRefs(refs, indexes); err != nil {
			return nil, err
		}
	}
	if len(refs) == 0 {
		return nil, nil
	}
	v.life.RLock()
	defer v.life.RUnlock()
	if v.samples == nil {
		return nil, ErrNoSamples
	}
	blocks := make([]SampleBlock, 0, len(refs))
	for _, ref := range refs {
		// One transaction a block: a record may have many, and they are large.
		err := v.samples.View(func(r *tree.Reader) error {
			content, err := readSample(r, sequence, ref)
			blocks = append(blocks, SampleBlock{Index: ref.Index, Bytes: content})
			return err
		})
		if err != nil {
			return nil, v.located(err)
		}
	}
	return blocks, nil
}

func selectRefs(refs []SampleRef, indexes []uint32) ([]SampleRef, error) {
	byIndex := make(map[uint32]SampleRef, len(refs))
	for _, ref := range refs {
		byIndex[ref.Index] = ref
	}
	selected := make([]SampleRef, 0, len(indexes))
	for _, index := range indexes {
		ref, found := byIndex[index]
		if !found {
			return nil, ErrNotFound
		}
		selected = append(selected, ref)
	}
	return selected, nil
}

// readSample reads one block and holds it against its record.
func readSample(r *tree.Reader, sequence uint64, ref SampleRef) ([]byte, error) {
	key := sampleKey(sequence, ref.Index)
	value, found, err := pagefile.Get(r, bucketSamples, key)
	if err != nil {
		return nil, err
	}
	if !found || !ref.fits(value.Content) {
		return nil, notTheSamples(key)
	}
	return value.Content, nil
}

// fits says whether a block is the one the record names.
func (r SampleRef) fits(block []byte) bool {
	return uint64(len(block)) == r.Length && envelope.Checksum(block) == r.Checksum
}

func notTheSamples(key []byte) error {
	return &damage.Error{Bucket: bucketSamples, Key: key, Problem: "not the samples that the record names"}
}

func page(limit int) int {
	if limit <= 0 || limit > MaxPage {
		return MaxPage
	}
	return limit
}

func anyKey([]byte) bool { return true }
