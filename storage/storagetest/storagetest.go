// Package storagetest is the one contract that every backend of the inspection ports must fulfil: the store on disk, and the double in memory
// that tests of the edges stand on. Run holds a backend to it.
package storagetest

import (
	"testing"

	"example.com/admit/service/inspection"
)

// Backend is what is held to the contract. A backend that can be closed and opened again with what it kept also has
//
//	Restart(t *testing.T) Backend
type Backend interface {
	inspection.Recorder
	inspection.Catalogue
	inspection.Archive
	inspection.Publisher
	inspection.History
}

type restarter interface {
	Restart(t *testing.T) Backend
}

// Run holds backends to the contract. open returns an empty one each time, whose clock is at hand or near it; it is closed by a cleanup of
// the test it was opened in. A backend that rolls over to new volumes should do so after some dozen kilobytes, so that the contract is tried
// across volumes.
func Run(t *testing.T, open func(t *testing.T) Backend) {
	for _, c := range []struct {
		name string
		test func(*scene)
	}{
		{"RecordAndFind", recordAndFind},
		{"SentAgain", sentAgain},
		{"OtherContent", otherContent},
		{"FiftyAtOnce", fiftyAtOnce},
		{"FiftyOfOneUnit", fiftyOfOneUnit},
		{"Refusals", refusals},
		{"CallerKeepsItsBuffers", callerKeepsItsBuffers},
		{"Attempts", attempts},
		{"Purposes", purposes},
		{"OfUnit", ofUnit},
		{"CountsByQuarter", countsByQuarter},
		{"CountsAgainstModel", countsAgainstModel},
		{"ListAgainstModel", listAgainstModel},
		{"After", after},
		{"Await", await},
		{"SweepsBitExact", sweepsBitExact},
		{"RoundTrip", roundTrip},
		{"PartTypes", partTypes},
		{"Calibrations", calibrations},
		{"Status", status},
		{"Restart", restart},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			c.test(newScene(t, open))
		})
	}
}
