package rpc

import (
	"net"
	"sync/atomic"
	"testing"
	"time"

	"google.golang.org/protobuf/types/known/timestamppb"

	"example.com/admit/service/network"
)

// newCalibration returns a calibration of a pi-network with three standards that could be real: nobody solves it here.
func newCalibration(id, head string) *network.Calibration {
	c := &network.Calibration{
		ID: id, ContactHead: head, Network: network.PiNetwork, ReferenceImpedanceOhm: 50, NominalTerminationOhm: 25,
		TakenAt: time.Date(2026, 11, 30, 6, 0, 0, 0, time.UTC), ValidFor: 24 * time.Hour,
		SourceLevelUncertaintyDB: 0.1, DriftGainDB: 0.02, DriftPhaseDeg: 0.1, ContactUncertaintyOhm: 0.05,
		Standards: []network.Standard{{Kind: network.Open}, {Kind: network.Short}, {Kind: network.Load, ResistanceOhm: 25, ResistanceUncertaintyOhm: 0.02}},
	}
	for i := range c.Standards {
		s := &c.Standards[i]
		for k := range 11 {
			s.FrequencyHz = append(s.FrequencyHz, 24.9e6+1e4*float64(k))
			s.Re, s.Im = append(s.Re, 0.5*float64(i)), append(s.Im, 0.01*float64(k))
		}
	}
	return c
}

func ptr[T any](v T) *T { return &v }

// steppedClock is the wall clock, moved.
type steppedClock struct{ by atomic.Int64 }

func (c *steppedClock) Now() time.Time { return time.Now().Add(time.Duration(c.by.Load())) }

func (c *steppedClock) add(d time.Duration) { c.by.Add(int64(d)) }

// tooLate is behind the year 9999.
var tooLate = timestamppb.Timestamp{Seconds: 1 << 60}

func listenForBenchmark(b *testing.B) net.Listener {
	b.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		b.Fatal(err)
	}
	return l
}
