// Package wire converts between the domain and the wire contract admit.v1, in both directions. Servers, the station client, the command
// line and the stored record use it; the domain does not know it. A converter from the wire checks what the domain's types cannot
// hold (an enum out of range, a number that does not fit), with a fault that names the field; the domain checks the rest.
package wire

import (
	"fmt"
	"math"
	"time"

	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
)

// table pairs the values of a closed set with their wire enum, in both directions.
type table[D comparable, W ~int32] struct {
	field string
	pairs []pair[D, W]
}

type pair[D comparable, W ~int32] struct {
	domain D
	wire   W
}

// toWire returns the wire value; a domain value without one gives the zero (unspecified) value.
func (t table[D, W]) toWire(d D) W {
	for _, p := range t.pairs {
		if p.domain == d {
			return p.wire
		}
	}
	return 0
}

// toDomain returns the domain value, or a fault naming the field.
func (t table[D, W]) toDomain(w W) (D, error) {
	for _, p := range t.pairs {
		if p.wire == w {
			return p.domain, nil
		}
	}
	var zero D
	return zero, inspection.Faultf(inspection.Malformed, t.field, "want one of the named values, got %d", int32(w))
}

// instant converts a timestamp; nil gives the zero time.
func instant(t *timestamppb.Timestamp) time.Time {
	if t == nil {
		return time.Time{}
	}
	return t.AsTime()
}

// timestamp converts a time; the zero time gives nil.
func timestamp(t time.Time) *timestamppb.Timestamp {
	if t.IsZero() {
		return nil
	}
	return timestamppb.New(t)
}

// maxSeconds is the longest duration a message can state: thirty years, so that it fits a time.Duration with room.
const maxSeconds = 1e9

// duration converts seconds, to the nearest nanosecond.
func duration(field string, seconds float64) (time.Duration, error) {
	if !(seconds >= 0 && seconds <= maxSeconds) {
		return 0, inspection.Faultf(inspection.Malformed, field, "want 0 to %g s, got %g", maxSeconds, seconds)
	}
	return time.Duration(math.Round(seconds * 1e9)), nil
}

// hash converts 32 bytes; none at all is the zero hash.
func hash(field string, b []byte) (h [32]byte, err error) {
	if len(b) != 0 && len(b) != len(h) {
		return h, inspection.Faultf(inspection.Malformed, field, "want %d bytes, got %d", len(h), len(b))
	}
	copy(h[:], b)
	return h, nil
}

// bytesOf returns the hash as bytes; the zero hash is none at all.
func bytesOf(h [32]byte) []byte {
	if h == ([32]byte{}) {
		return nil
	}
	return h[:]
}

// integer converts an unsigned number of the wire into an int, held against a largest value.
func integer(field string, v uint32, most int) (int, error) {
	if int64(v) > int64(most) {
		return 0, inspection.Faultf(inspection.Malformed, field, "want at most %d, got %d", most, v)
	}
	return int(v), nil
}

// in puts the name of the surrounding message in front of a fault's field.
func in(parent string, err error) error {
	if f, ok := err.(*inspection.Fault); ok {
		return &inspection.Fault{Kind: f.Kind, Field: parent + "." + f.Field, Err: f.Err}
	}
	return fmt.Errorf("%s: %w", parent, err)
}

var verdicts = table[verdict.Verdict, pb.Verdict]{"verdict", []pair[verdict.Verdict, pb.Verdict]{
	{verdict.Pass, pb.Verdict_VERDICT_PASS},
	{verdict.Fail, pb.Verdict_VERDICT_FAIL},
	{verdict.Retest, pb.Verdict_VERDICT_RETEST},
}}

// Verdict converts a verdict to the wire.
func Verdict(v verdict.Verdict) pb.Verdict { return verdicts.toWire(v) }
