package pagefile

import (
	"bytes"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/tree"
)

// Order of reading.
type Order int

// The two orders.
const (
	Ascending Order = iota
	Descending
)

// Get reads and checks the value under a key; false says that there is none, with certainty: a flipped bit in the key of an entry leaves that
// entry between its old neighbours (or the page is out of order, which the tree notices), so the entries beside the gap are
// checked before it is called one.
func Get(r *tree.Reader, bucket string, key []byte) (envelope.Value, bool, error) {
	b, err := bucketOf(r, bucket)
	if err != nil {
		return envelope.Value{}, false, err
	}
	cursor := b.Cursor()
	found, stored, err := cursor.Seek(key)
	if err != nil {
		return envelope.Value{}, false, err
	}
	if bytes.Equal(found, key) {
		value, err := envelope.Open(bucket, key, stored)
		return value, err == nil, err
	}
	_, _, err = beside(cursor, bucket, found, stored)
	return envelope.Value{}, false, err
}

// beside checks the two entries around a gap, of which a seek found the upper one, and returns the lower one, where the cursor then stands.
func beside(cursor *tree.Cursor, bucket string, upper, stored []byte) (key, value []byte, err error) {
	if err := judge(bucket, upper, stored); err != nil {
		return nil, nil, err
	}
	if key, value, err = cursor.Prev(); err != nil {
		return nil, nil, err
	}
	return key, value, judge(bucket, key, value)
}

// Walk visits the entries of a bucket from key from on (descending: from the entry at or before it), as long as within holds of the key and
// visit says to go on. Visited entries are for visit to check; those just outside either end are checked here, so that no entry is
// missing from the range because a bit of its key flipped.
func Walk(
	r *tree.Reader, bucket string, from []byte, order Order,
	within func(key []byte) bool, visit func(key, stored []byte) (more bool, err error),
) error {
	b, err := bucketOf(r, bucket)
	if err != nil {
		return err
	}
	cursor := b.Cursor()
	key, stored, err := cursor.Seek(from)
	if err == nil && !bytes.Equal(key, from) {
		key, stored, err = beside(cursor, bucket, key, stored)
		if err == nil && order == Ascending {
			key, stored, err = cursor.Next()
		}
	}
	step := cursor.Next
	if order == Descending {
		step = cursor.Prev
	}
	for ; err == nil && key != nil; key, stored, err = step() {
		if !within(key) {
			return judge(bucket, key, stored)
		}
		if more, err := visit(key, stored); err != nil || !more {
			return err
		}
	}
	return err
}

// judge checks an entry that is only passed by; no entry is sound.
func judge(bucket string, key, stored []byte) error {
	if key == nil {
		return nil
	}
	_, err := envelope.Open(bucket, key, stored)
	return err
}

func bucketOf(r *tree.Reader, name string) (*tree.Bucket, error) {
	bucket, found, err := r.Bucket(name)
	if err == nil && !found {
		err = &damage.Error{Bucket: name, Problem: "the bucket is missing"}
	}
	return bucket, err
}
