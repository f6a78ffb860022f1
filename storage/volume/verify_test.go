package volume

import (
	"context"
	"encoding/binary"
	"errors"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/tree"
)

// tamper changes a file of a volume through bbolt, as a faulty program would: structure and envelopes stay sound.
func tamper(t *testing.T, path, bucket string, change func(b *bbolt.Bucket) error) {
	t.Helper()
	db, err := bbolt.Open(path, 0o600, &bbolt.Options{Timeout: time.Second})
	if err != nil {
		t.Fatal(err)
	}
	if err := db.Update(func(tx *bbolt.Tx) error { return change(tx.Bucket([]byte(bucket))) }); err != nil {
		t.Fatal(err)
	}
	if err := db.Close(); err != nil {
		t.Fatal(err)
	}
}

// TestVerifyComparesTheParts tampers with one part of a volume at a time; every envelope is right, only the parts disagree.
func TestVerifyComparesTheParts(t *testing.T) {
	t.Parallel()
	e := entry(2)
	seal := func(bucket string, key, content []byte) []byte { return envelope.Seal(bucket, key, 1, content) }
	state := func(records uint64) []byte {
		s := state{records: records, firstSequence: 1, lastSequence: mutilated, lastSampled: mutilated}
		return s.encode()
	}
	for _, c := range []struct {
		name, file, bucket string
		change             func(b *bbolt.Bucket) error
		finding            string
	}{
		{"index entry lost", recordsName, bucketTerms,
			func(b *bbolt.Bucket) error { return b.Delete(termKey(e.Terms[0], 2)) }, "is not in the index"},
		{"stray index entry", recordsName, bucketTerms,
			func(b *bbolt.Bucket) error {
				key := termKey(e.Terms[0], 3)
				return b.Put(key, seal(bucketTerms, key, nil))
			}, "index entries"},
		{"counter changed", recordsName, bucketCounters,
			func(b *bbolt.Bucket) error {
				key := []byte("total")
				return b.Put(key, seal(bucketCounters, key, appendNumbers(nil, []int64{41})))
			}, "add up"},
		{"counter lost", recordsName, bucketCounters,
			func(b *bbolt.Bucket) error { return b.Delete([]byte("total")) }, "counters"},
		{"object lost", recordsName, bucketObjects,
			func(b *bbolt.Bucket) error { return b.Delete(objectKey(e.Objects[0].Kind, e.Objects[0].Hash)) }, "needs it"},
		{"object changed", recordsName, bucketObjects,
			func(b *bbolt.Bucket) error {
				key := objectKey(e.Objects[0].Kind, e.Objects[0].Hash)
				return b.Put(key, seal(bucketObjects, key, []byte("other")))
			}, "does not have the hash"},
		{"record lost", recordsName, bucketRecords,
			func(b *bbolt.Bucket) error { return b.Delete(recordKey(2)) }, "counts 40 records"},
		{"record moved", recordsName, bucketRecords,
			func(b *bbolt.Bucket) error { return b.Put(recordKey(3), b.Get(recordKey(2))) }, "checksum"},
		{"count changed", recordsName, bucketMeta,
			func(b *bbolt.Bucket) error {
				return b.Put([]byte(keyState), seal(bucketMeta, []byte(keyState), state(41)))
			}, "counts 41 records"},
		{"samples lost", samplesName, bucketSamples,
			func(b *bbolt.Bucket) error { return b.Delete(sampleKey(2, 0)) }, "not the samples"},
		{"samples of another", samplesName, bucketSamples,
			func(b *bbolt.Bucket) error {
				key := sampleKey(2, 0)
				return b.Put(key, seal(bucketSamples, key, make([]byte, len(e.Samples[0].Bytes))))
			}, "not the samples"},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			folder := opened(t)
			tamper(t, filepath.Join(folder, c.file), c.bucket, c.change)
			v, err := OpenForReading(folder, testOptions)
			if err != nil {
				t.Fatal(err)
			}
			defer v.Close()
			report, err := v.Verify(context.Background())
			if err != nil {
				t.Fatal(err)
			}
			if found := report.Err(); !errors.Is(found, damage.ErrDamaged) || !strings.Contains(found.Error(), c.finding) {
				t.Errorf("verify found %v, want %q", found, c.finding)
			}
			if err := v.Seal(context.Background()); !errors.Is(err, damage.ErrDamaged) {
				t.Errorf("a volume with damage was sealed: %v", err)
			}
		})
	}
}

// TestOrphans writes samples whose record never came, as a crash between the two commits leaves them.
func TestOrphans(t *testing.T) {
	t.Parallel()
	folder := opened(t)
	tamper(t, filepath.Join(folder, samplesName), bucketSamples, func(b *bbolt.Bucket) error {
		for index := range uint32(3) {
			key := sampleKey(mutilated+1, index)
			if err := b.Put(key, envelope.Seal(bucketSamples, key, 1, []byte("orphan"))); err != nil {
				return err
			}
		}
		return nil
	})
	v, err := OpenForWriting(folder, testOptions)
	if err != nil {
		t.Fatal(err)
	}
	defer v.Close()
	if got := v.NextSequence(); got != mutilated+2 {
		t.Errorf("next sequence %d would take over the orphans of %d", got, mutilated+1)
	}
	if err := v.Append([]*Entry{entry(mutilated + 1)}); !errors.Is(err, ErrInvalid) {
		t.Errorf("append over orphans: %v", err)
	}
	if err := v.Append([]*Entry{entry(mutilated + 2)}); err != nil {
		t.Fatal(err)
	}
	report, err := v.Verify(context.Background())
	if err != nil || report.Err() != nil || report.Orphans != 3 {
		t.Errorf("verify: %d orphans, %v, %v", report.Orphans, report.Err(), err)
	}
}

// TestVerifyBesideTheWriter verifies again and again while entries arrive: no false alarm.
func TestVerifyBesideTheWriter(t *testing.T) {
	t.Parallel()
	v := create(t, testOptions)
	fill(t, v, 1, 100)
	var writer sync.WaitGroup
	done := make(chan struct{})
	writer.Go(func() {
		defer close(done)
		for s := uint64(101); s <= 400; s += 20 {
			fill(t, v, s, s+19)
		}
	})
	for rounds := 0; ; rounds++ {
		report, err := v.Verify(context.Background())
		if err != nil || report.Err() != nil {
			t.Fatalf("round %d: %v, %v", rounds, err, report.Err())
		}
		select {
		case <-done:
			if rounds < 2 {
				t.Errorf("only %d rounds beside the writer", rounds)
			}
			writer.Wait()
			return
		default:
		}
	}
}

func TestVerifyStops(t *testing.T) {
	t.Parallel()
	v := create(t, testOptions)
	fill(t, v, 1, 10)
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := v.Verify(ctx); !errors.Is(err, context.Canceled) {
		t.Errorf("verify: %v", err)
	}
}

// TestOldestRead holds a read transaction open and watches the gauge.
func TestOldestRead(t *testing.T) {
	t.Parallel()
	var mu sync.Mutex
	now := start
	options := testOptions
	options.Clock = func() time.Time {
		mu.Lock()
		defer mu.Unlock()
		return now
	}
	v := create(t, options)
	fill(t, v, 1, 1)
	err := v.view(func(*tree.Reader) error {
		mu.Lock()
		now = now.Add(3 * time.Second)
		mu.Unlock()
		if age := v.OldestRead(); age != 3*time.Second {
			t.Errorf("oldest read %v", age)
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if age := v.OldestRead(); age != 0 {
		t.Errorf("oldest read %v after it ended", age)
	}
}

// TestEscapeOrder holds that index keys sort as (name, value, sequence), whatever bytes these hold.
func TestEscapeOrder(t *testing.T) {
	parts := []string{"", "\x00", "\x00\x00", "\x00\x01", "\x00\xff", "\x01", "a", "a\x00", "a\x00b", "aa", "\xff"}
	var last []byte
	for _, name := range parts[1:] {
		for _, value := range parts {
			for _, sequence := range []uint64{0, 1, 1 << 40} {
				term := Term{[]byte(name), []byte(value)}
				key := termKey(term, sequence)
				if string(key) <= string(last) {
					t.Errorf("%q %q %d does not sort behind the one before", name, value, sequence)
				}
				last = key
				gotTerm, gotSequence, err := parseTermKey(key)
				if err != nil || string(gotTerm.Name) != name || string(gotTerm.Value) != value || gotSequence != sequence {
					t.Errorf("%q %q %d came back as %q %d (%v)", name, value, sequence, gotTerm, gotSequence, err)
				}
			}
		}
	}
	for _, bad := range [][]byte{nil, {0}, {'a', 0}, {'a', 0, 7, 0, 1}, binary.BigEndian.AppendUint32([]byte("a\x00\x01b\x00\x01"), 1)} {
		if _, _, err := parseTermKey(bad); err == nil {
			t.Errorf("%x passes for an index key", bad)
		}
	}
}
