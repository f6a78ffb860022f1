package inspection

import (
	"context"
	"time"

	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// Recorder keeps judged inspections. Record returns only when the record is durable. The same id with the same content hash returns the
// first record with Already set; with another hash a Fault of kind Conflict. It counts the attempt and gives sequence and time.
type Recorder interface {
	Record(ctx context.Context, r *Record, sweeps []sweep.Sweep) (Recorded, error)
	// Find returns the record of an id, or ok false.
	Find(ctx context.Context, id ID) (r *Record, ok bool, err error)
}

// Recorded is the answer of a Recorder: the record as it is kept.
type Recorded struct {
	Record  *Record
	Already bool
}

// History finds what was recorded before. Records come without samples, newest first, and are not changed by either side.
type History interface {
	// OfUnit returns at most limit inspections of one unit held against one part type, of whatever version, for one purpose: what attempts are
	// counted by. Unit is known by its serial, or by lot, carrier and pocket without one.
	OfUnit(ctx context.Context, purpose Purpose, unit UnitID, partType string, limit int) ([]*Record, error)
	// List is that of Archive.
	List(ctx context.Context, f Filter, before uint64, limit int) ([]*Record, error)
}

// Catalogue knows part types and calibrations. What it returns is immutable and shared. A name that does not exist is a Fault of kind
// Unknown.
type Catalogue interface {
	PartType(ctx context.Context, name string, version int) (*parttype.PartType, error)
	Calibration(ctx context.Context, id CalibrationID) (*network.Calibration, [32]byte, error)
}

// Clock gives the wall-clock time.
type Clock interface{ Now() time.Time }

// Observer hears of what happens; it must not block. Durations are of monotonic time.
type Observer interface {
	Judged(r *Record, fit time.Duration)
	Recorded(r *Record, lastSampleToRecorded time.Duration)
	Rejected(station StationID, kind Kind)
}

// Filter chooses inspections; empty fields do not filter.
type Filter struct {
	Serial      Serial
	Lot         Lot
	Station     StationID
	From, Until time.Time // of MeasuredAt: from inclusive, until exclusive
}

// CountFilter chooses counts. Times are rounded outwards to quarters of an hour, which is how counts are kept.
type CountFilter struct {
	From, Until time.Time
	Station     StationID
	PartType    string
	Lot         Lot
	Purpose     Purpose // "": production
}

// Count is how many inspections of one station, part type, lot and verdict there are; each attempt is one.
type Count struct {
	Station     StationID
	PartType    string
	Lot         Lot
	Verdict     verdict.Verdict
	Inspections int64
}

// Archive reads what was recorded. Records come without samples. No call holds the store open while its caller waits for a network or a
// person.
type Archive interface {
	Find(ctx context.Context, id ID) (r *Record, ok bool, err error)
	// List returns at most limit records that meet the filter, newest first, with a sequence below before (0: from the newest). When
	// fewer than limit come back there are no more.
	List(ctx context.Context, f Filter, before uint64, limit int) ([]*Record, error)
	// After returns at most limit records with a sequence above the given one, oldest first.
	After(ctx context.Context, sequence uint64, limit int) ([]*Record, error)
	// Await returns when a record with a sequence above the given one exists, or with the context's error.
	Await(ctx context.Context, sequence uint64) error
	// Last returns the sequence of the newest record, 0 when there is none.
	Last() uint64
	// Sweeps returns the raw sweeps of one inspection, bit for bit as they came.
	Sweeps(ctx context.Context, id ID) ([]sweep.Sweep, error)
	Count(ctx context.Context, f CountFilter) ([]Count, error)
	Status(ctx context.Context) (StoreStatus, error)
}

// StoreStatus is what a store holds and how it fares.
type StoreStatus struct {
	Recording   bool
	Fault       string // why not, in words
	Last        uint64
	Inspections uint64
	FreeBytes   uint64
	Schema      uint32
	Volumes     []VolumeStatus
}

// VolumeStatus is one volume of the store.
type VolumeStatus struct {
	Number                      uint32
	Open                        bool
	FirstSequence, LastSequence uint64
	MeasuredFrom, MeasuredUntil time.Time // zero: none yet
	Inspections                 uint64
	RecordBytes, SampleBytes    uint64
}

// Published is a part type as it is kept.
type Published struct {
	PartType *parttype.PartType
	At       time.Time
	By       string
}

// Publisher keeps part types and calibrations. The same content under the same name again is harmless and says so; other content is a
// Fault of kind Conflict.
type Publisher interface {
	PublishPartType(ctx context.Context, p *parttype.PartType, by string) (kept Published, already bool, err error)
	PublishCalibration(ctx context.Context, c *network.Calibration, by string) (already bool, err error)
	// PartTypes lists the newest version of every part type by name; with a name, every version of it, newest first.
	PartTypes(ctx context.Context, name string) ([]Published, error)
	// FindPartType returns one version, 0 the newest.
	FindPartType(ctx context.Context, name string, version int) (p Published, ok bool, err error)
}
