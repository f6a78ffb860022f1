package volume

import (
	"encoding/binary"
	"fmt"
	"time"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// identity is written once into both files of a volume, so that files of two volumes cannot be mixed up.
type identity struct {
	number    uint64
	id        [16]byte
	createdAt time.Time
}

func (i identity) encode() []byte {
	b := binary.BigEndian.AppendUint64(nil, i.number)
	b = append(b, i.id[:]...)
	return binary.BigEndian.AppendUint64(b, uint64(i.createdAt.UnixNano()))
}

func decodeIdentity(b []byte) (identity, error) {
	var i identity
	d := decoder{rest: b}
	i.number = d.uint64()
	copy(i.id[:], d.take(uint64(len(i.id))))
	i.createdAt = time.Unix(0, int64(d.uint64())).UTC()
	return i, d.finish()
}

// state is rewritten by every commit of the records file.
type state struct {
	records       uint64
	firstSequence uint64
	lastSequence  uint64
	firstTested   int64 // ns since 1970
	lastTested    int64
	lastSampled   uint64        // highest sequence with samples: the samples file must reach it
	age           time.Duration // time open for writing
}

func (s state) encode() []byte {
	b := binary.BigEndian.AppendUint64(nil, s.records)
	for _, v := range []uint64{
		s.firstSequence, s.lastSequence, uint64(s.firstTested), uint64(s.lastTested), s.lastSampled, uint64(s.age),
	} {
		b = binary.BigEndian.AppendUint64(b, v)
	}
	return b
}

func decodeState(b []byte) (state, error) {
	d := decoder{rest: b}
	s := state{
		records: d.uint64(), firstSequence: d.uint64(), lastSequence: d.uint64(),
		firstTested: int64(d.uint64()), lastTested: int64(d.uint64()),
		lastSampled: d.uint64(), age: time.Duration(d.uint64()),
	}
	return s, d.finish()
}

// with returns the state after one more entry.
func (s state) with(e *Entry) state {
	tested := e.TestedAt.UnixNano()
	if s.records == 0 {
		s.firstSequence, s.firstTested, s.lastTested = e.Sequence, tested, tested
	}
	s.records++
	s.lastSequence = e.Sequence
	s.firstTested = min(s.firstTested, tested)
	s.lastTested = max(s.lastTested, tested)
	if len(e.Samples) > 0 {
		s.lastSampled = e.Sequence
	}
	return s
}

// putSealed stores content under key in its envelope.
func putSealed(b *bbolt.Bucket, name string, key []byte, revision uint64, content []byte) error {
	return b.Put(key, envelope.Seal(name, key, revision, content))
}

// getMeta reads a value that every volume has.
func getMeta(r *tree.Reader, key string) (envelope.Value, error) {
	value, found, err := pagefile.Get(r, bucketMeta, []byte(key))
	if err == nil && !found {
		err = &damage.Error{Bucket: bucketMeta, Key: []byte(key), Problem: "missing"}
	}
	return value, err
}

// readIdentity reads what a file says of itself.
func readIdentity(r *tree.Reader) (identity, error) {
	value, err := getMeta(r, keyVolume)
	if err != nil {
		return identity{}, err
	}
	i, err := decodeIdentity(value.Content)
	if err != nil {
		return identity{}, &damage.Error{Bucket: bucketMeta, Key: []byte(keyVolume), Problem: "identity", Cause: err}
	}
	return i, nil
}

func readState(r *tree.Reader) (state, error) {
	value, err := getMeta(r, keyState)
	if err != nil {
		return state{}, err
	}
	s, err := decodeState(value.Content)
	if err != nil {
		return state{}, &damage.Error{Bucket: bucketMeta, Key: []byte(keyState), Problem: "state", Cause: err}
	}
	return s, nil
}

// lastSequence returns the sequence in the last key of a bucket whose keys begin with one; 0 for an empty bucket.
func lastSequence(r *tree.Reader, name string) (uint64, error) {
	bucket, found, err := r.Bucket(name)
	if err != nil {
		return 0, err
	}
	if !found {
		return 0, &damage.Error{Bucket: name, Problem: "the bucket is missing"}
	}
	key, _, err := bucket.Cursor().Last()
	if err != nil || key == nil {
		return 0, err
	}
	if len(key) < 8 {
		return 0, &damage.Error{Bucket: name, Key: key, Problem: fmt.Sprintf("key of %d bytes", len(key))}
	}
	return binary.BigEndian.Uint64(key), nil
}
