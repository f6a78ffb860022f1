package volume

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/maphash"
	"path/filepath"
	"slices"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// chunk is how many values one transaction of a verification visits.
const chunk = 200

// verifier checks the values of a volume, also while it is being written: it looks at what was there when it began, in chunks, and
// catches up at the end where parts have to agree.
type verifier struct {
	volume *Volume
	report *Report

	upTo     uint64             // last sequence looked at
	written  bool               // the volume may be written meanwhile
	records  uint64             // read so far
	called   keySet             // index entries the records call for
	samples  []boundSample      // sample blocks the records call for, in the order of their keys
	counters map[string][]int64 // sums of the deltas
	objects  map[ObjectRef]bool // objects found where a record needs them
	unsure   bool               // some record could not be read, so sums cannot be held against it
	seed     maphash.Seed
}

// boundSample is a sample block with the record that names it.
type boundSample struct {
	sequence uint64
	ref      SampleRef
}

// keySet tells sets of keys apart without keeping them: their number and the sum of their hashes. Two passes in sequence over records and
// index then compare, where looking each key up would take ten times as long.
type keySet struct {
	count, sum uint64
}

func (s *keySet) add(seed maphash.Seed, key []byte) {
	s.count++
	s.sum += maphash.Bytes(seed, key)
}

func (c *verifier) run(ctx context.Context) error {
	c.counters, c.objects, c.seed = make(map[string][]int64), make(map[ObjectRef]bool), maphash.MakeSeed()
	var facts state
	err := c.volume.view(func(r *tree.Reader) (err error) {
		if _, err = readIdentity(r); err != nil {
			return err
		}
		facts, err = readState(r)
		return err
	})
	if err != nil {
		c.report.add(err)
		return nil
	}
	c.upTo = facts.lastSequence
	if err := c.readRecords(ctx, 0, c.upTo); err != nil {
		return err
	}
	if c.records != facts.records && !c.unsure {
		c.finding(bucketMeta, []byte(keyState), "the volume counts %d records up to %d, there are %d", facts.records, c.upTo, c.records)
	}
	for _, step := range []func(context.Context) error{c.readTerms, c.readObjects, c.readRevisions, c.readSamples, c.compareCounters} {
		if err := step(ctx); err != nil {
			return err
		}
	}
	return nil
}

func (c *verifier) finding(bucket string, key []byte, format string, args ...any) {
	path := filepath.Join(c.volume.folder, recordsName)
	c.report.add(&damage.Error{File: path, Bucket: bucket, Key: key, Problem: fmt.Sprintf(format, args...)})
}

// inRecords and inSamples run read on one of the two files, whatever stage the volume is in by now.
func (c *verifier) inRecords(read func(*tree.Reader) error) error { return c.volume.view(read) }

func (c *verifier) inSamples(read func(*tree.Reader) error) error {
	c.volume.life.RLock()
	defer c.volume.life.RUnlock()
	return c.volume.samples.View(read)
}

type visit func(r *tree.Reader, key []byte, value envelope.Value) error

// errEnough, returned by a visit, ends the walk: the rest arrived after the verification began.
var errEnough = errors.New("enough")

// each visits all entries of a bucket with their envelopes opened, a chunk a transaction. What a visit returns, and what keeps the bucket
// from being read, become findings.
func (c *verifier) each(ctx context.Context, view func(func(*tree.Reader) error) error, bucket string, from []byte, visit visit) error {
	for more := true; more; {
		if err := ctx.Err(); err != nil {
			return err
		}
		more = false
		err := view(func(r *tree.Reader) error {
			count, size := 0, 0
			return pagefile.Walk(r, bucket, from, Ascending, anyKey, func(key, stored []byte) (bool, error) {
				if count >= chunk || size > maxPageBytes {
					more = true
					return false, nil
				}
				count, size = count+1, size+len(stored)
				from = append(bytes.Clone(key), 0)
				value, err := envelope.Open(bucket, key, stored)
				if err == nil {
					err = visit(r, key, value)
				} else {
					c.unsure = true
				}
				if err == errEnough {
					return false, nil
				}
				c.report.add(err)
				return true, nil
			})
		})
		if err != nil {
			// The bucket cannot be read on from here; that is said, and nothing is concluded from what is missing.
			c.unsure = true
			c.report.add(err)
		}
	}
	return nil
}

// readRecords checks the records above low up to high, and their objects, and notes what else they call for.
func (c *verifier) readRecords(ctx context.Context, low, high uint64) error {
	return c.eachRecord(ctx, low, high, func(r *tree.Reader, record Record) error {
		c.records++
		c.report.Records++
		for _, key := range termKeys(record) {
			c.called.add(c.seed, key)
		}
		for _, ref := range record.Samples {
			c.samples = append(c.samples, boundSample{record.Sequence, ref})
		}
		for _, d := range record.Deltas {
			c.counters[string(d.Key)] = addNumbers(c.counters[string(d.Key)], d.Values)
		}
		return c.checkObjects(r, record)
	})
}

func (c *verifier) eachRecord(ctx context.Context, low, high uint64, visit func(*tree.Reader, Record) error) error {
	return c.each(ctx, c.inRecords, bucketRecords, recordKey(low+1), func(r *tree.Reader, key []byte, value envelope.Value) error {
		if len(key) != 8 {
			return &damage.Error{Bucket: bucketRecords, Key: key, Problem: "not a sequence number"}
		}
		sequence := binary.BigEndian.Uint64(key)
		if sequence > high {
			return errEnough
		}
		record, err := c.volume.decode(r, sequence, value)
		if err != nil {
			c.unsure = true
			return err
		}
		return visit(r, record)
	})
}

// termKeys returns the index keys of a record, each once.
func termKeys(record Record) [][]byte {
	keys := make([][]byte, 0, len(record.Terms))
	for _, t := range record.Terms {
		keys = append(keys, termKey(t, record.Sequence))
	}
	slices.SortFunc(keys, bytes.Compare)
	return slices.CompactFunc(keys, bytes.Equal)
}

func (c *verifier) checkObjects(r *tree.Reader, record Record) error {
	for _, ref := range record.Objects {
		if c.objects[ref] {
			continue
		}
		_, found, err := pagefile.Get(r, bucketObjects, objectKey(ref.Kind, ref.Hash))
		if err != nil {
			return err
		}
		if !found {
			return &damage.Error{Bucket: bucketObjects, Key: objectKey(ref.Kind, ref.Hash), Problem: fmt.Sprintf("record %d needs it", record.Sequence)}
		}
		c.objects[ref] = true
	}
	return nil
}

// readTerms holds the index against what the records call for.
func (c *verifier) readTerms(ctx context.Context) error {
	var found keySet
	err := c.each(ctx, c.inRecords, bucketTerms, []byte{0}, func(_ *tree.Reader, key []byte, _ envelope.Value) error {
		c.report.Terms++
		_, sequence, err := parseTermKey(key)
		if err == nil && sequence <= c.upTo {
			found.add(c.seed, key)
		}
		return err
	})
	if err != nil || c.unsure || found == c.called {
		return err
	}
	c.finding(bucketTerms, nil, "%d index entries, the records call for %d others", found.count, c.called.count)
	return c.nameMissing(ctx)
}

// nameMissing looks every index entry up, to say which are not there.
func (c *verifier) nameMissing(ctx context.Context) error {
	return c.eachRecord(ctx, 0, c.upTo, func(r *tree.Reader, record Record) error {
		for _, key := range termKeys(record) {
			if _, found, err := pagefile.Get(r, bucketTerms, key); err != nil {
				return err
			} else if !found {
				c.finding(bucketTerms, key, "record %d is not in the index", record.Sequence)
			}
		}
		return nil
	})
}

func (c *verifier) readObjects(ctx context.Context) error {
	return c.each(ctx, c.inRecords, bucketObjects, []byte{0}, func(_ *tree.Reader, key []byte, value envelope.Value) error {
		c.report.Objects++
		hash := sha256.Sum256(value.Content)
		if !bytes.HasSuffix(key, hash[:]) {
			return &damage.Error{Bucket: bucketObjects, Key: key, Problem: "the content does not have the hash in its key"}
		}
		return nil
	})
}

func (c *verifier) readRevisions(ctx context.Context) error {
	check := func(view func(func(*tree.Reader) error) error) error {
		return c.each(ctx, view, pagefile.Revisions, []byte{0}, func(*tree.Reader, []byte, envelope.Value) error { return nil })
	}
	var err error
	if c.records > 0 {
		err = check(c.inRecords)
	}
	if err == nil && len(c.samples) > 0 {
		err = check(c.inSamples)
	}
	return err
}

// readSamples reads all of the samples file, which a volume that is not closed always has; what no record calls for is an orphan.
func (c *verifier) readSamples(ctx context.Context) error {
	c.report.add(c.inSamples(func(r *tree.Reader) error {
		_, err := readIdentity(r)
		return err
	}))
	expected := c.samples
	err := c.each(ctx, c.inSamples, bucketSamples, []byte{0}, func(_ *tree.Reader, key []byte, value envelope.Value) error {
		if len(key) != 12 {
			return &damage.Error{Bucket: bucketSamples, Key: key, Problem: "not a sequence number and an index"}
		}
		if c.written && binary.BigEndian.Uint64(key) > c.upTo {
			return errEnough
		}
		c.report.Samples++
		for len(expected) > 0 && bytes.Compare(expected[0].key(), key) < 0 {
			c.report.add(notTheSamples(expected[0].key()))
			expected = expected[1:]
		}
		if len(expected) == 0 || !bytes.Equal(expected[0].key(), key) {
			c.report.Orphans++
			return nil
		}
		ref := expected[0].ref
		expected = expected[1:]
		if !ref.fits(value.Content) {
			return notTheSamples(key)
		}
		return nil
	})
	if err != nil {
		return err
	}
	for _, missing := range expected {
		c.report.add(notTheSamples(missing.key()))
	}
	if c.unsure {
		// They may belong to a record that cannot be read.
		c.report.Orphans = 0
	}
	return nil
}

func (b boundSample) key() []byte { return sampleKey(b.sequence, b.ref.Index) }

// compareCounters holds the counters against the sums of the deltas. Records that arrived meanwhile are read first, until so few remain
// that the last of them and the counters can be read in one transaction.
func (c *verifier) compareCounters(ctx context.Context) error {
	for {
		var last uint64
		err := c.volume.view(func(r *tree.Reader) error {
			facts, err := readState(r)
			if err != nil {
				return err
			}
			if last = facts.lastSequence; last > c.upTo+chunk {
				return nil
			}
			if err := c.addLate(r); err != nil {
				return err
			}
			return c.readCounters(r)
		})
		if err != nil {
			c.report.add(err)
			return nil
		}
		if last <= c.upTo+chunk {
			return nil
		}
		from := c.upTo
		c.upTo = last
		if err := c.readRecords(ctx, from, last); err != nil {
			return err
		}
	}
}

// addLate adds the deltas of records behind upTo.
func (c *verifier) addLate(r *tree.Reader) error {
	return pagefile.Walk(r, bucketRecords, recordKey(c.upTo+1), Ascending, anyKey, func(key, stored []byte) (bool, error) {
		value, err := envelope.Open(bucketRecords, key, stored)
		if err != nil {
			return false, err
		}
		record, err := decodeRecord(0, value.Content)
		for _, d := range record.Deltas {
			c.counters[string(d.Key)] = addNumbers(c.counters[string(d.Key)], d.Values)
		}
		return true, err
	})
}

func (c *verifier) readCounters(r *tree.Reader) error {
	seen := 0
	err := pagefile.Walk(r, bucketCounters, []byte{0}, Ascending, anyKey, func(key, stored []byte) (bool, error) {
		c.report.Counters++
		values, err := openCounter(key, stored)
		if err != nil {
			c.report.add(err)
			return true, nil
		}
		seen++
		if want := c.counters[string(key)]; !c.unsure && !slices.Equal(values, want) {
			c.finding(bucketCounters, key, "counter is %v, the records add up to %v", values, want)
		}
		return true, nil
	})
	if err == nil && !c.unsure && seen < len(c.counters) {
		c.finding(bucketCounters, nil, "%d counters, the records call for %d", seen, len(c.counters))
	}
	return damage.Locate(err, 0, filepath.Join(c.volume.folder, recordsName))
}
