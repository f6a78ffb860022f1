package volume

import (
	"encoding/binary"
	"errors"
	"fmt"
	"time"

	"example.com/admit/storage/volume/envelope"
)

// encodeRecord returns the content of a record's envelope; doc.go draws it.
func encodeRecord(e *Entry) []byte {
	b := make([]byte, 0, e.Size())
	b = binary.BigEndian.AppendUint64(b, uint64(e.TestedAt.UnixNano()))
	b = append(b, e.ContentHash[:]...)
	b = appendBytes(b, e.Payload)
	b = binary.AppendUvarint(b, uint64(len(e.Terms)))
	for _, t := range e.Terms {
		b = appendBytes(appendBytes(b, t.Name), t.Value)
	}
	b = binary.AppendUvarint(b, uint64(len(e.Deltas)))
	for _, d := range e.Deltas {
		b = appendNumbers(appendBytes(b, d.Key), d.Values)
	}
	b = binary.AppendUvarint(b, uint64(len(e.Objects)))
	for _, o := range e.Objects {
		b = append(appendBytes(b, []byte(o.Kind)), o.Hash[:]...)
	}
	b = binary.AppendUvarint(b, uint64(len(e.Samples)))
	for _, s := range e.Samples {
		b = binary.AppendUvarint(b, uint64(s.Index))
		b = binary.AppendUvarint(b, uint64(len(s.Bytes)))
		b = binary.BigEndian.AppendUint32(b, envelope.Checksum(s.Bytes))
	}
	return b
}

func appendBytes(dst, part []byte) []byte {
	return append(binary.AppendUvarint(dst, uint64(len(part))), part...)
}

// appendNumbers writes a count and that many signed varints: the form of a delta and of a counter.
func appendNumbers(dst []byte, values []int64) []byte {
	dst = binary.AppendUvarint(dst, uint64(len(values)))
	for _, v := range values {
		dst = binary.AppendVarint(dst, v)
	}
	return dst
}

var errMalformed = errors.New("content is malformed")

// decodeRecord is the inverse of encodeRecord. Slices alias b; what it allocates beside them is bounded by the limits of an entry.
func decodeRecord(sequence uint64, b []byte) (Record, error) {
	d := decoder{rest: b}
	r := Record{Sequence: sequence}
	r.TestedAt = time.Unix(0, int64(d.uint64())).UTC()
	copy(r.ContentHash[:], d.take(uint64(len(r.ContentHash))))
	r.Payload = d.bytes()
	for range d.count(MaxTerms) {
		r.Terms = append(r.Terms, Term{Name: d.bytes(), Value: d.bytes()})
	}
	for range d.count(MaxDeltas) {
		r.Deltas = append(r.Deltas, Delta{Key: d.bytes(), Values: d.numbers()})
	}
	for range d.count(MaxObjects) {
		ref := ObjectRef{Kind: string(d.bytes())}
		copy(ref.Hash[:], d.take(uint64(len(ref.Hash))))
		r.Objects = append(r.Objects, ref)
	}
	for range d.count(MaxSamples) {
		r.Samples = append(r.Samples, SampleRef{Index: uint32(d.uvarint()), Length: d.uvarint(), Checksum: d.uint32()})
	}
	return r, d.finish()
}

func decodeCounter(b []byte) ([]int64, error) {
	d := decoder{rest: b}
	values := d.numbers()
	return values, d.finish()
}

// decoder takes fields off the front; after the first that does not fit, everything is zero and finish reports it.
type decoder struct {
	rest   []byte
	failed bool
}

func (d *decoder) take(n uint64) []byte {
	if d.failed || n > uint64(len(d.rest)) {
		d.failed = true
		return nil
	}
	part := d.rest[:n:n]
	d.rest = d.rest[n:]
	return part
}

func (d *decoder) uint64() uint64 {
	if b := d.take(8); b != nil {
		return binary.BigEndian.Uint64(b)
	}
	return 0
}

func (d *decoder) uint32() uint32 {
	if b := d.take(4); b != nil {
		return binary.BigEndian.Uint32(b)
	}
	return 0
}

func (d *decoder) uvarint() uint64 {
	v, n := binary.Uvarint(d.rest)
	if d.failed || n <= 0 {
		d.failed = true
		return 0
	}
	d.rest = d.rest[n:]
	return v
}

func (d *decoder) varint() int64 {
	v, n := binary.Varint(d.rest)
	if d.failed || n <= 0 {
		d.failed = true
		return 0
	}
	d.rest = d.rest[n:]
	return v
}

func (d *decoder) bytes() []byte { return d.take(d.uvarint()) }

// count reads how many items follow. Each takes a byte at least, so a count beyond the rest is a lie, as is one beyond the limit that
// held when it was written.
func (d *decoder) count(limit uint64) int {
	n := d.uvarint()
	if n > uint64(len(d.rest)) || n > limit {
		d.failed = true
	}
	if d.failed {
		return 0
	}
	return int(n)
}

func (d *decoder) numbers() []int64 {
	n := d.count(MaxCounterSize)
	values := make([]int64, 0, n)
	for range n {
		values = append(values, d.varint())
	}
	return values
}

func (d *decoder) finish() error {
	switch {
	case d.failed:
		return errMalformed
	case len(d.rest) > 0:
		return fmt.Errorf("%w: %d bytes too many", errMalformed, len(d.rest))
	}
	return nil
}
