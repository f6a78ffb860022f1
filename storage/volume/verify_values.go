package volume

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
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
	records  uint64             // sound or not
	terms    uint64             // index entries the records call for
	samples  uint64             // sample blocks the records call for
	counters map[string][]int64 // sums of the deltas
	objects  map[ObjectRef]bool // objects found where a record needs them
	unsure   bool               // some record could not be read, so sums cannot be held against it
}

func (c *verifier) run(ctx context.Context) error {
	c.counters, c.objects = make(map[string][]int64), make(map[ObjectRef]bool)
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
	if c.records != facts.records {
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
			count := 0
			return pagefile.Walk(r, bucket, from, Ascending, anyKey, func(key, stored []byte) (bool, error) {
				if count++; count > chunk {
					more = true
					return false, nil
				}
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

// readRecords checks the records above low up to high: the record itself, its index entries, its objects. Samples come separately, from
// their own file.
func (c *verifier) readRecords(ctx context.Context, low, high uint64) error {
	var refs []SampleRef
	var owners []uint64
	err := c.each(ctx, c.inRecords, bucketRecords, recordKey(low+1), func(r *tree.Reader, key []byte, value envelope.Value) error {
		if len(key) != 8 {
			return &damage.Error{Bucket: bucketRecords, Key: key, Problem: "not a sequence number"}
		}
		sequence := binary.BigEndian.Uint64(key)
		if sequence > high {
			return errEnough
		}
		c.records++
		c.report.Records++
		record, err := c.volume.decode(r, sequence, value)
		if err != nil {
			c.unsure = true
			return err
		}
		for _, ref := range record.Samples {
			refs, owners = append(refs, ref), append(owners, sequence)
		}
		for _, d := range record.Deltas {
			c.counters[string(d.Key)] = addNumbers(c.counters[string(d.Key)], d.Values)
		}
		if err := c.checkTerms(r, record); err != nil {
			return err
		}
		return c.checkObjects(r, record)
	})
	if err != nil || c.volume.samples == nil {
		return err
	}
	for i, ref := range refs {
		if err := ctx.Err(); err != nil {
			return err
		}
		c.samples++
		c.report.add(c.inSamples(func(r *tree.Reader) error {
			_, err := readSample(r, owners[i], ref)
			return err
		}))
	}
	return nil
}

func (c *verifier) checkTerms(r *tree.Reader, record Record) error {
	keys := make([][]byte, 0, len(record.Terms))
	for _, t := range record.Terms {
		keys = append(keys, termKey(t, record.Sequence))
	}
	slices.SortFunc(keys, bytes.Compare)
	for _, key := range slices.CompactFunc(keys, bytes.Equal) {
		c.terms++
		_, found, err := pagefile.Get(r, bucketTerms, key)
		if err != nil {
			return err
		}
		if !found {
			return &damage.Error{Bucket: bucketTerms, Key: key, Problem: fmt.Sprintf("record %d is not in the index", record.Sequence)}
		}
	}
	return nil
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

// readTerms counts the index entries: every record's entries are there already, so equal numbers mean there are no others.
func (c *verifier) readTerms(ctx context.Context) error {
	var found uint64
	err := c.each(ctx, c.inRecords, bucketTerms, []byte{0}, func(_ *tree.Reader, key []byte, _ envelope.Value) error {
		c.report.Terms++
		_, sequence, err := parseTermKey(key)
		if err == nil && sequence <= c.upTo {
			found++
		}
		return err
	})
	if err == nil && !c.unsure && found != c.terms {
		c.finding(bucketTerms, nil, "%d index entries, the records call for %d", found, c.terms)
	}
	return err
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
	if err == nil && c.samples > 0 {
		err = check(c.inSamples)
	}
	return err
}

// readSamples reads all of the samples file; what no record calls for is an orphan.
func (c *verifier) readSamples(ctx context.Context) error {
	if c.volume.samples == nil {
		return nil
	}
	c.report.add(c.inSamples(func(r *tree.Reader) error {
		_, err := readIdentity(r)
		return err
	}))
	var found uint64
	err := c.each(ctx, c.inSamples, bucketSamples, []byte{0}, func(_ *tree.Reader, key []byte, _ envelope.Value) error {
		c.report.Samples++
		if len(key) != 12 {
			return &damage.Error{Bucket: bucketSamples, Key: key, Problem: "not a sequence number and an index"}
		}
		if c.written && binary.BigEndian.Uint64(key) > c.upTo {
			return errEnough
		}
		found++
		return nil
	})
	if err == nil && !c.unsure && found > c.samples {
		c.report.Orphans = found - c.samples
	}
	return err
}

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
