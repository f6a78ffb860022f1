package inspection

import (
	"encoding/hex"
	"errors"
	"strings"
	"testing"
	"time"

	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
)

// example returns what a fixture says of one unit.
func example() Begin {
	id, err := ParseID("018f3a52-7d3c-7a11-9c55-0123456789ab")
	if err != nil {
		panic(err)
	}
	locked := true
	return Begin{
		ID: id, Purpose: Production,
		Unit:    UnitID{Serial: "TM0000123", Lot: "L2601", Carrier: "C07", Pocket: 12, Attempt: 1},
		Station: "N1", ContactHead: "N1-A", Operator: "op-17", PartType: PartTypeRef{Name: "TM-25M000-F10"}, Calibration: "N1-A-2026-11-30",
		MeasuredAt:  time.Date(2026, 11, 30, 9, 12, 44, 5, time.UTC),
		Temperature: &Temperature{Celsius: 25.1, StandardUncertainty: 0.2}, ReferenceLock: &locked,
	}
}

func exampleSweep() sweep.Sweep {
	power := -2.2
	w := sweep.Sweep{Role: sweep.Main, Quantity: sweep.S21, SourcePowerDBm: &power, Timing: sweep.Timing{Dwell: 2e6, Averaging: 5e5, Phase: sweep.PhaseContinuous}}
	for i := range 9 {
		w.FrequencyHz = append(w.FrequencyHz, 25e6+float64(i))
		w.Re, w.Im = append(w.Re, 0.01*float64(i)), append(w.Im, -0.02)
	}
	return w
}

// TestContentHashIsStable: the hash is part of the contract with fixtures; this one was taken when the contract was made.
func TestContentHashIsStable(t *testing.T) {
	b := example()
	sum := ContentHash(&b, []sweep.Sweep{exampleSweep()})
	const want = "426bcb72f40470236f32f18449a12b61e99b508dd012cc53e368ce053e774b83"
	if got := hex.EncodeToString(sum[:]); got != want {
		t.Errorf("content hash %s, want %s: old re-sends would be refused", got, want)
	}
}

// TestContentHashSeesEveryField: each change of content changes the hash; a wish for an early answer does not.
func TestContentHashSeesEveryField(t *testing.T) {
	base := example()
	seen := map[[32]byte]string{ContentHash(&base, []sweep.Sweep{exampleSweep()}): "unchanged"}
	for name, change := range map[string]func(*Begin, *sweep.Sweep){
		"id":          func(b *Begin, _ *sweep.Sweep) { b.ID[15]++ },
		"purpose":     func(b *Begin, _ *sweep.Sweep) { b.Purpose = Check },
		"serial":      func(b *Begin, _ *sweep.Sweep) { b.Unit.Serial += "x" },
		"lot":         func(b *Begin, _ *sweep.Sweep) { b.Unit.Lot = "" },
		"carrier":     func(b *Begin, _ *sweep.Sweep) { b.Unit.Carrier = "" },
		"pocket":      func(b *Begin, _ *sweep.Sweep) { b.Unit.Pocket = 0 },
		"attempt":     func(b *Begin, _ *sweep.Sweep) { b.Unit.Attempt = 2 },
		"station":     func(b *Begin, _ *sweep.Sweep) { b.Station = "N2" },
		"head":        func(b *Begin, _ *sweep.Sweep) { b.ContactHead = "N1-B" },
		"operator":    func(b *Begin, _ *sweep.Sweep) { b.Operator = "" },
		"part type":   func(b *Begin, _ *sweep.Sweep) { b.PartType.Name = "x" },
		"version":     func(b *Begin, _ *sweep.Sweep) { b.PartType.Version = 1 },
		"calibration": func(b *Begin, _ *sweep.Sweep) { b.Calibration = "" },
		"time":        func(b *Begin, _ *sweep.Sweep) { b.MeasuredAt = b.MeasuredAt.Add(1) },
		"temperature": func(b *Begin, _ *sweep.Sweep) { b.Temperature = nil },
		"lock":        func(b *Begin, _ *sweep.Sweep) { b.ReferenceLock = nil },
		"role":        func(_ *Begin, w *sweep.Sweep) { w.Role = sweep.Unwanted },
		"quantity":    func(_ *Begin, w *sweep.Sweep) { w.Quantity = sweep.S11 },
		"power":       func(_ *Begin, w *sweep.Sweep) { w.SourcePowerDBm = nil },
		"dwell":       func(_ *Begin, w *sweep.Sweep) { w.Timing.Dwell++ },
		"phase":       func(_ *Begin, w *sweep.Sweep) { w.Timing.Phase = sweep.PhaseUnstated },
		"grid":        func(_ *Begin, w *sweep.Sweep) { w.Grid = &sweep.Grid{StartHz: 25e6, StopHz: 25e6 + 8, Points: 9} },
		"frequency":   func(_ *Begin, w *sweep.Sweep) { w.FrequencyHz[8]++ },
		"sample":      func(_ *Begin, w *sweep.Sweep) { w.Im[3] = 0 },
	} {
		b, w := example(), exampleSweep()
		change(&b, &w)
		sum := ContentHash(&b, []sweep.Sweep{w})
		if other, ok := seen[sum]; ok {
			t.Errorf("a change of %s gives the hash of %s", name, other)
		}
		seen[sum] = name
	}
	b := example()
	b.AnswerWithin = time.Second
	if ContentHash(&b, []sweep.Sweep{exampleSweep()}) != ContentHash(&base, []sweep.Sweep{exampleSweep()}) {
		t.Error("a wish for an early answer changes the hash")
	}
}

func TestCalibrationHashSeesSamples(t *testing.T) {
	c := network.Calibration{ID: "c", ContactHead: "N1-A", Network: network.PiNetwork, Standards: []network.Standard{{Kind: network.Open, FrequencyHz: []float64{1}, Re: []float64{1}, Im: []float64{0}}}}
	before := CalibrationHash(&c)
	c.Standards[0].Im[0] = 1e-9
	if CalibrationHash(&c) == before {
		t.Error("a changed sample of a standard leaves the hash as it was")
	}
}

func TestParseID(t *testing.T) {
	for _, good := range []string{"018f3a52-7d3c-7a11-9c55-0123456789ab", "018f3a52-7d3c-7fff-bfff-ffffffffffff"} {
		if id, err := ParseID(good); err != nil || id.String() != good {
			t.Errorf("%s: %v, %v", good, id, err)
		}
	}
	for _, bad := range []string{"", "x", "018f3a52-7d3c-4a11-9c55-0123456789ab", "018f3a52-7d3c-7a11-1c55-0123456789ab", "018F3A52-7D3C-7A11-9C55-0123456789AB",
		"018f3a527d3c7a119c550123456789ab", "018f3a52-7d3c-7a11-9c55-0123456789ag", "018f3a52-7d3c7-a11-9c55-0123456789ab"} {
		if _, err := ParseID(bad); KindOf(err) != Malformed {
			t.Errorf("%q is taken (%v)", bad, err)
		}
	}
}

// TestBeginCheckNamesTheField: every bad value is refused with its field.
func TestBeginCheckNamesTheField(t *testing.T) {
	if b := example(); b.Check() != nil {
		t.Fatal(b.Check())
	}
	for field, change := range map[string]func(*Begin){
		"inspection":        func(b *Begin) { b.ID = ID{} },
		"purpose":           func(b *Begin) { b.Purpose = "" },
		"unit.serial":       func(b *Begin) { b.Unit.Serial = Serial(strings.Repeat("x", MaxText+1)) },
		"unit.lot":          func(b *Begin) { b.Unit.Lot = "L\n1" },
		"unit.carrier":      func(b *Begin) { b.Unit.Carrier = "\xff" },
		"unit":              func(b *Begin) { b.Unit.Serial, b.Unit.Pocket = "", 0 },
		"unit.pocket":       func(b *Begin) { b.Unit.Pocket = -1 },
		"unit.attempt":      func(b *Begin) { b.Unit.Attempt = -1 },
		"station":           func(b *Begin) { b.Station = "" },
		"contact_head":      func(b *Begin) { b.ContactHead = "" },
		"part_type":         func(b *Begin) { b.PartType.Name = "" },
		"part_type_version": func(b *Begin) { b.PartType.Version = -1 },
		"measured_at":       func(b *Begin) { b.MeasuredAt = time.Time{} },
		"temperature":       func(b *Begin) { b.Temperature.Celsius = 1e9 },
		"answer_within":     func(b *Begin) { b.AnswerWithin = -1 },
	} {
		b := example()
		change(&b)
		err := b.Check()
		var f *Fault
		if !errors.As(err, &f) || f.Kind != Malformed || f.Field != field {
			t.Errorf("%s: %v", field, err)
		}
	}
}
