package volume

import (
	"crypto/sha256"
	"errors"
	"fmt"
	"math"
	"time"

	"example.com/admit/storage/volume/envelope"
)

// Limits of an entry. They bound what one entry can cost, and keep every key below what bbolt takes.
const (
	MaxTermName    = 64       // bytes of a term's name
	MaxTermValue   = 1024     // bytes of a term's value
	MaxTerms       = 64       // terms of an entry
	MaxCounterKey  = 1024     // bytes of a counter's key
	MaxCounterSize = 64       // numbers in a counter
	MaxDeltas      = 256      // deltas of an entry
	MaxKind        = 32       // bytes of an object's kind
	MaxObjects     = 64       // objects of an entry
	MaxObject      = 64 << 20 // bytes of an object
	MaxPayload     = 16 << 20 // bytes of a record
	MaxSampleBlock = 64 << 20 // bytes of a sample block
	MaxSamples     = 4096     // sample blocks of an entry
)

var (
	// ErrInvalid says that an entry breaks a limit or contradicts itself. Nothing of it was written.
	ErrInvalid = errors.New("entry is not valid")
	// ErrNotFound says that the volume is sound where it was read and does not hold what was asked for.
	ErrNotFound = errors.New("not in this volume")
	// ErrNoSamples says that the samples of this volume were dropped by retention. The records remain.
	ErrNoSamples = errors.New("the samples of this volume were dropped")
	// ErrNotOpen says that the volume is no longer written, or not yet ready for what was asked.
	ErrNotOpen = errors.New("the volume is not in the state for this")
)

// Term makes a record findable: the volume keeps an index from (name, value) to sequence numbers. Both are opaque; values of one
// name are ordered as bytes.
type Term struct{ Name, Value []byte }

// Delta is added to the counter under Key, number by number. A counter grows to the longest delta it was given.
type Delta struct {
	Key    []byte
	Values []int64
}

// Object is something records refer to and that many share: a part type, a calibration. It is kept once per volume under its SHA-256 hash.
type Object struct {
	Kind  string
	Hash  [sha256.Size]byte
	Bytes []byte
}

// SampleBlock is one block of raw samples of a record, such as one sweep, in the form its codec gave it.
type SampleBlock struct {
	Index uint32
	Bytes []byte
}

// Entry is all that one inspection adds to the store, in one transaction.
type Entry struct {
	// Sequence is the place in the order of arrival, over all volumes. Numbers ascend; some may be missing.
	Sequence uint64
	// TestedAt is when the unit was tested, which says nothing about the order of arrival. Kept to the nanosecond, years 1678 to 2262.
	TestedAt time.Time
	// ContentHash identifies the content as its sender sent it.
	ContentHash [sha256.Size]byte
	Payload     []byte
	Terms       []Term
	Deltas      []Delta
	Objects     []Object
	Samples     []SampleBlock
}

// ObjectRef names an object that a record uses.
type ObjectRef struct {
	Kind string
	Hash [sha256.Size]byte
}

// SampleRef binds a sample block to its record: orphans of an interrupted commit can never be taken for it.
type SampleRef struct {
	Index    uint32
	Length   uint64
	Checksum uint32 // CRC-32C of the block
}

// Record is an entry as it is read back, with the names of its objects and samples in place of their contents.
type Record struct {
	Sequence    uint64
	TestedAt    time.Time
	ContentHash [sha256.Size]byte
	Payload     []byte
	Terms       []Term
	Deltas      []Delta
	Objects     []ObjectRef
	Samples     []SampleRef
	Schema      uint64
	Revision    string // of the software that wrote it
}

// Record returns the record that the entry becomes, as it would be read back from software of that revision.
func (e *Entry) Record(revision string) Record {
	r := Record{
		Sequence: e.Sequence, TestedAt: time.Unix(0, e.TestedAt.UnixNano()).UTC(), ContentHash: e.ContentHash, Payload: e.Payload,
		Terms: e.Terms, Deltas: e.Deltas, Schema: envelope.Schema, Revision: revision,
	}
	for _, o := range e.Objects {
		r.Objects = append(r.Objects, ObjectRef{o.Kind, o.Hash})
	}
	for _, s := range e.Samples {
		r.Samples = append(r.Samples, SampleRef{s.Index, uint64(len(s.Bytes)), envelope.Checksum(s.Bytes)})
	}
	return r
}

// Size returns roughly how many bytes the entry will take on disk.
func (e *Entry) Size() int64 {
	size := int64(len(e.Payload)) + 128
	for _, t := range e.Terms {
		size += int64(2*len(t.Name)+2*len(t.Value)) + 64
	}
	for _, d := range e.Deltas {
		size += int64(2*len(d.Key)) + int64(10*len(d.Values)) + 64
	}
	for _, s := range e.Samples {
		size += int64(len(s.Bytes)) + 64
	}
	return size + int64(64*len(e.Objects))
}

// Validate checks an entry by itself: everything but its sequence and the hashes of its objects. Errors match ErrInvalid.
func (e *Entry) Validate() error {
	for _, check := range []func() error{e.checkSize, e.checkTerms, e.checkDeltas, e.checkObjects, e.checkSamples} {
		if err := check(); err != nil {
			return err
		}
	}
	return nil
}

func invalid(format string, args ...any) error {
	return fmt.Errorf("%w: %s", ErrInvalid, fmt.Sprintf(format, args...))
}

func (e *Entry) checkSize() error {
	if len(e.Payload) == 0 || len(e.Payload) > MaxPayload {
		return invalid("payload of %d bytes, allowed are 1 to %d", len(e.Payload), MaxPayload)
	}
	if t := e.TestedAt; !time.Unix(0, t.UnixNano()).Equal(t) {
		return invalid("tested at %v, which nanoseconds since 1970 cannot express", t)
	}
	return nil
}

func (e *Entry) checkTerms() error {
	if len(e.Terms) > MaxTerms {
		return invalid("%d terms, allowed are %d", len(e.Terms), MaxTerms)
	}
	for _, t := range e.Terms {
		if len(t.Name) == 0 || len(t.Name) > MaxTermName || len(t.Value) > MaxTermValue {
			return invalid("term %q: name of 1 to %d and value of up to %d bytes are allowed", t.Name, MaxTermName, MaxTermValue)
		}
	}
	return nil
}

func (e *Entry) checkDeltas() error {
	if len(e.Deltas) > MaxDeltas {
		return invalid("%d deltas, allowed are %d", len(e.Deltas), MaxDeltas)
	}
	for _, d := range e.Deltas {
		if len(d.Key) == 0 || len(d.Key) > MaxCounterKey || len(d.Values) == 0 || len(d.Values) > MaxCounterSize {
			return invalid("delta %q: key of 1 to %d bytes and 1 to %d numbers are allowed", d.Key, MaxCounterKey, MaxCounterSize)
		}
		for _, v := range d.Values {
			// Far beyond any count, and small enough that sums over the life of a volume cannot overflow.
			if v > math.MaxInt32 || v < math.MinInt32 {
				return invalid("delta %q: %d is outside 32 bits", d.Key, v)
			}
		}
	}
	return nil
}

func (e *Entry) checkObjects() error {
	if len(e.Objects) > MaxObjects {
		return invalid("%d objects, allowed are %d", len(e.Objects), MaxObjects)
	}
	for _, o := range e.Objects {
		if o.Kind == "" || len(o.Kind) > MaxKind || len(o.Bytes) > MaxObject {
			return invalid("object %q: kind of 1 to %d and content of up to %d bytes are allowed", o.Kind, MaxKind, MaxObject)
		}
	}
	return nil
}

func (e *Entry) checkSamples() error {
	if len(e.Samples) > MaxSamples {
		return invalid("%d sample blocks, allowed are %d", len(e.Samples), MaxSamples)
	}
	for i, s := range e.Samples {
		if len(s.Bytes) > MaxSampleBlock {
			return invalid("sample block %d has %d bytes, allowed are %d", s.Index, len(s.Bytes), MaxSampleBlock)
		}
		if i > 0 && s.Index <= e.Samples[i-1].Index {
			return invalid("sample block %d follows block %d", s.Index, e.Samples[i-1].Index)
		}
	}
	return nil
}
