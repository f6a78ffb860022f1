// Package envelope wraps every value of the store so that damage is noticed whenever it is read, and so that a later program knows
// what it reads and what wrote it.
//
//	byte 0..3   CRC-32C (Castagnoli), big-endian, over: bucket name, one zero byte, key, and the value from byte 4 on
//	then        schema number, unsigned varint
//	then        number of the software revision in the file's "revisions" bucket, unsigned varint
//	then        content
//
// Bucket and key are part of the sum: a value that was moved is as damaged as one that was changed.
package envelope

import (
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"

	"example.com/admit/storage/volume/damage"
)

// Schema is the number this program writes, and the highest it reads.
const Schema = 1

// ErrNewerSchema says that a value was written by a later program. The value is intact; this program must not interpret it.
var ErrNewerSchema = errors.New("written by a newer program")

// Value is the inside of an envelope. Content aliases the bytes given to Open.
type Value struct {
	Schema   uint64
	Revision uint64 // number in the "revisions" bucket
	Content  []byte
}

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

// Checksum returns the CRC-32C of b, the sum used throughout the store.
func Checksum(b []byte) uint32 { return crc32.Checksum(b, castagnoli) }

// Extend returns the CRC-32C of what sum covers followed by b.
func Extend(sum uint32, b []byte) uint32 { return crc32.Update(sum, castagnoli, b) }

// Seal returns the stored form of content under key in bucket.
func Seal(bucket string, key []byte, revision uint64, content []byte) []byte {
	value := make([]byte, 4, 4+2*binary.MaxVarintLen64+len(content))
	value = binary.AppendUvarint(value, Schema)
	value = binary.AppendUvarint(value, revision)
	value = append(value, content...)
	binary.BigEndian.PutUint32(value, sum(bucket, key, value[4:]))
	return value
}

// Open checks a stored value and returns its inside. A sum that does not match is a *damage.Error naming bucket and key; a schema above
// Schema is ErrNewerSchema.
func Open(bucket string, key, stored []byte) (Value, error) {
	if len(stored) < 6 {
		return Value{}, broken(bucket, key, fmt.Sprintf("value of %d bytes is shorter than its envelope", len(stored)))
	}
	want := binary.BigEndian.Uint32(stored)
	if got := sum(bucket, key, stored[4:]); got != want {
		return Value{}, broken(bucket, key, fmt.Sprintf("checksum is %08x, stored as %08x", got, want))
	}
	// The sum holds, so a bad varint below can only be a writer's fault; it is still refused rather than trusted.
	rest := stored[4:]
	schema, n := binary.Uvarint(rest)
	if n <= 0 {
		return Value{}, broken(bucket, key, "schema number is malformed")
	}
	rest = rest[n:]
	revision, n := binary.Uvarint(rest)
	if n <= 0 {
		return Value{}, broken(bucket, key, "revision number is malformed")
	}
	if schema > Schema {
		return Value{}, fmt.Errorf("bucket %s: key %x: schema %d, this program reads up to %d: %w", bucket, key, schema, Schema, ErrNewerSchema)
	}
	return Value{Schema: schema, Revision: revision, Content: rest[n:]}, nil
}

func sum(bucket string, key, rest []byte) uint32 {
	s := crc32.Checksum([]byte(bucket), castagnoli)
	s = crc32.Update(s, castagnoli, []byte{0})
	s = crc32.Update(s, castagnoli, key)
	return crc32.Update(s, castagnoli, rest)
}

func broken(bucket string, key []byte, problem string) error {
	return &damage.Error{Bucket: bucket, Key: append([]byte{}, key...), Problem: problem}
}
