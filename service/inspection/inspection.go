// Package inspection is the use case: one unit at one station in one attempt, from its first sample to its recorded verdict. It owns the
// words for that (who, where, when, under which calibration and part type) and the ports that it needs; servers, files and stores
// stand outside and are handed in.
package inspection

import (
	"time"

	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// ID is an inspection's identity, a UUID of version 7 (RFC 9562) chosen by the fixture.
type ID [16]byte

// Serial, Lot, StationID, ContactHead and CalibrationID are names that people and machines give; distinct types, so that a swap does not
// compile.
type (
	Serial        string
	Lot           string
	StationID     string
	ContactHead   string
	CalibrationID string
)

// Purpose says why a unit was inspected; only Production enters yield and counters.
type Purpose string

// The purposes.
const (
	Production   Purpose = "production"
	Reference    Purpose = "reference"
	Check        Purpose = "check"
	FirstArticle Purpose = "first-article"
	Study        Purpose = "study"
	Engineering  Purpose = "engineering"
)

// Purposes lists the purposes.
func Purposes() []Purpose {
	return []Purpose{Production, Reference, Check, FirstArticle, Study, Engineering}
}

// UnitID says which unit: by serial, or by lot, carrier and pocket where parts carry no serial.
type UnitID struct {
	Serial  Serial
	Lot     Lot
	Carrier string
	Pocket  int // from 1; 0: none
	Attempt int // as the station counts it, from 1; 0: not counted by the station
}

// Temperature of the unit while it was measured.
type Temperature struct{ Celsius, StandardUncertainty float64 }

// PartTypeRef names a part type; Version 0 asks for the newest.
type PartTypeRef struct {
	Name    string
	Version int
}

// Applied is the part type that a verdict was reached under, pinned by the SHA-256 of its limits file.
type Applied struct {
	PartTypeRef
	Hash [32]byte
}

// Begin is what is said of an inspection before its first sample.
type Begin struct {
	ID            ID
	Purpose       Purpose
	Unit          UnitID
	Station       StationID
	ContactHead   ContactHead
	Operator      string
	PartType      PartTypeRef
	Calibration   CalibrationID // "": none
	MeasuredAt    time.Time
	Temperature   *Temperature
	ReferenceLock *bool         // nil: the station did not say
	AnswerWithin  time.Duration // 0: no wish
	Offline       *verdict.Judgement
}

// Case is one inspection with everything that a verdict depends on. Part type and calibration are what Begin named, resolved.
type Case struct {
	Begin       Begin
	PartType    *parttype.PartType
	Calibration *network.Calibration // nil: none
	Background  Background
	Sweeps      []sweep.Sweep // in measuring order
}

// Record is a judged inspection as it is kept. Sweeps keep their samples in the store beside the record; when a Record is read back
// without them, FrequencyHz, Re and Im are nil and Points still tells how many there are.
type Record struct {
	Begin           Begin      // as the fixture said it
	PartType        Applied    // what Begin.PartType stood for
	CalibrationHash [32]byte   // zero: the nominal network
	ContentHash     [32]byte   // over the canonical content: Begin and sweeps
	Background      Background // what the judgement knew of earlier inspections
	Sweeps          []SweepHeader
	Judgement       verdict.Judgement
	Software        string // revision that judged

	// Known when recorded.
	Sequence   uint64
	RecordedAt time.Time
	Attempt    int    // as the service counts it, from 1
	Caller     string // identity of who sent it
}

// SweepHeader is a sweep without its samples.
type SweepHeader struct {
	sweep.Sweep     // FrequencyHz, Re, Im nil
	Points      int // of the stored samples
}
