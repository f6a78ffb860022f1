package pagefile

import (
	"encoding/binary"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/tree"
)

// Revisions is the bucket that gives software revisions numbers, so that an envelope holds one byte instead of a text. Keys are the number,
// four bytes big-endian, from 1 on; contents are the text.
const Revisions = "revisions"

// Intern returns the number of a software revision in this file, giving it the next one if it is new.
func Intern(tx *bbolt.Tx, revision string) (uint64, error) {
	bucket, err := tx.CreateBucketIfNotExists([]byte(Revisions))
	if err != nil {
		return 0, err
	}
	next := uint64(1)
	cursor := bucket.Cursor()
	for key, stored := cursor.First(); key != nil; key, stored = cursor.Next() {
		value, err := envelope.Open(Revisions, key, stored)
		if err != nil {
			return 0, err
		}
		if len(key) != 4 {
			return 0, &damage.Error{Bucket: Revisions, Key: append([]byte{}, key...), Problem: "not a revision number"}
		}
		number := uint64(binary.BigEndian.Uint32(key))
		if string(value.Content) == revision {
			return number, nil
		}
		next = number + 1
	}
	key := revisionKey(next)
	return next, bucket.Put(key, envelope.Seal(Revisions, key, next, []byte(revision)))
}

// Revision returns the text of a revision number.
func Revision(r *tree.Reader, number uint64) (string, error) {
	key := revisionKey(number)
	bucket, found, err := r.Bucket(Revisions)
	if err != nil {
		return "", err
	}
	var stored []byte
	if found {
		if stored, err = bucket.Get(key); err != nil {
			return "", err
		}
	}
	if stored == nil {
		return "", &damage.Error{Bucket: Revisions, Key: key, Problem: "a value names this revision, but it is not there"}
	}
	value, err := envelope.Open(Revisions, key, stored)
	return string(value.Content), err
}

func revisionKey(number uint64) []byte { return binary.BigEndian.AppendUint32(nil, uint32(number)) }
