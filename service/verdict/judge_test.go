package verdict

import (
	"math"
	"strings"
	"testing"

	"example.com/admit/service/parttype"
)

func at(v float64) *float64 { return &v }

// TestConformance holds conformance probabilities against published ones.
func TestConformance(t *testing.T) {
	for _, c := range []struct {
		name, source string
		v            Value
		b            parttype.Bounds
		want, tol    float64
	}{
		{"two limits", "JCGM 106:2012 7.4: y 13.6, u 1.8, limits 12.5 to 16.3 (value computed from the definition)", Value{13.6, 1.8}, parttype.Bounds{Min: at(12.5), Max: at(16.3)}, 0.6626297865, 1e-9},
		{"one limit", "Phi(1.4), standard normal table", Value{-5.47, 0.05}, parttype.Bounds{Max: at(-5.40)}, 0.91924334, 1e-7},
		{"both tails", "2 Phi(2) - 1, standard normal table", Value{0, 5}, parttype.Bounds{Min: at(-10), Max: at(10)}, 0.95449974, 1e-7},
		{"certain", "definition", Value{1, 0}, parttype.Bounds{Max: at(2)}, 1, 0},
		{"certainly not", "definition", Value{3, 0}, parttype.Bounds{Max: at(2)}, 0, 0},
	} {
		if c.source == "" {
			t.Errorf("%s: no source", c.name)
		}
		if got := Conformance(c.v, c.b); math.Abs(got-c.want) > c.tol {
			t.Errorf("%s: %.10f, want %.10f", c.name, got, c.want)
		}
	}
}

// TestDecisionRules walks a value across a limit of 40 with u = 1 under each rule at 95 %: the guard band is 1.645 wide.
func TestDecisionRules(t *testing.T) {
	b := parttype.Bounds{Max: at(40)}
	for _, c := range []struct {
		value                               float64
		simple, acceptance, rejection, both Outcome
	}{
		{38.3, Conforms, Conforms, Conforms, Conforms},
		{38.4, Conforms, Undecided, Conforms, Undecided},
		{39.9, Conforms, Undecided, Conforms, Undecided},
		{40.1, Violates, Violates, Conforms, Undecided},
		{41.6, Violates, Violates, Conforms, Undecided},
		{41.7, Violates, Violates, Violates, Violates},
	} {
		p := Conformance(Value{c.value, 1}, b)
		for _, r := range []struct {
			rule parttype.Rule
			want Outcome
		}{{parttype.Simple, c.simple}, {parttype.GuardedAcceptance, c.acceptance}, {parttype.GuardedRejection, c.rejection}, {parttype.GuardedBoth, c.both}} {
			if got := Decide(r.rule, 0.95, c.value, b, p); got != r.want {
				t.Errorf("%g under %s: %s, want %s", c.value, r.rule, got, r.want)
			}
		}
	}
}

// TestPrecedence: fail beats retest only where a valid sweep breaks a limit; a suspended limit is never a fail.
func TestPrecedence(t *testing.T) {
	limits := []parttype.Limit{
		{Quantity: parttype.MotionalResistance, Bounds: parttype.Bounds{Max: at(40)}},
		{Quantity: parttype.QualityFactor, Bounds: parttype.Bounds{Min: at(25000), Max: at(90000)}},
	}
	good := Reading{Quantity: parttype.MotionalResistance, Where: Nowhere, Unit: UnitOhm, Measured: Value{20, 0.1}, HasValue: true}
	bad := good
	bad.Measured.Value = 80
	near := good
	near.Measured.Value = 39.9
	q := Reading{Quantity: parttype.QualityFactor, Where: Nowhere, Unit: UnitNone, Measured: Value{60000, 100}, HasValue: true}
	suspendedBad := bad
	suspendedBad.SuspendedBy = []Cause{TooNoisy}
	vague := bad
	vague.Measured = Value{48, 20}
	clear := bad // far out, and as vague: that it is out is certain
	clear.Measured = Value{4000, 200}
	wide := Reading{Quantity: parttype.QualityFactor, Where: Nowhere, Unit: UnitNone, Measured: Value{26000, 1e7}, HasValue: true}
	noNumber := good
	noNumber.Measured = Value{math.NaN(), 1}
	cause := []RetestCause{NewCause(TooNoisy, "signal 3 dB above the noise")}
	for _, c := range []struct {
		name     string
		readings []Reading
		causes   []RetestCause
		want     Verdict
	}{
		{"all conform", []Reading{good, q}, nil, Pass},
		{"one broken", []Reading{bad, q}, nil, Fail},
		{"undecided", []Reading{near, q}, nil, Retest},
		{"broken but suspended", []Reading{suspendedBad, q}, cause, Retest},
		{"cause without a suspended limit", []Reading{good, q}, cause, Retest},
		{"no number", []Reading{noNumber, q}, nil, Retest},
		{"broken, but by a reading too vague to mean it", []Reading{vague, q}, nil, Retest},
		{"broken beyond doubt by a vague reading", []Reading{clear, q}, nil, Fail},
		{"so vague that most of it lies outside two limits", []Reading{good, wide}, nil, Retest},
	} {
		j := Weigh(parttype.Decision{Rule: parttype.GuardedBoth, Confidence: 0.95}, Evidence{Limits: limits, Readings: c.readings, Causes: c.causes})
		if j.Verdict != c.want {
			t.Errorf("%s: %s, want %s", c.name, j.Verdict, c.want)
		}
		if len(j.Findings) != len(limits) {
			t.Errorf("%s: %d findings, want %d", c.name, len(j.Findings), len(limits))
		}
		for _, f := range j.Findings {
			if f.Text == "" {
				t.Errorf("%s: a finding without words", c.name)
			}
		}
	}
	if j := Weigh(parttype.Decision{Rule: parttype.Simple}, Evidence{}); j.Verdict == Pass {
		t.Error("an inspection without any limit passes")
	}
}

// TestEveryCauseHasAdvice: each cause has a row, and no advice is shared by accident with an empty text.
func TestEveryCauseHasAdvice(t *testing.T) {
	if len(Causes()) != len(remedies) {
		t.Errorf("%d causes, %d remedies", len(Causes()), len(remedies))
	}
	for _, c := range Causes() {
		if NewCause(c, "x").Advice == "" {
			t.Errorf("%s: no advice", c)
		}
	}
}

func TestFormat(t *testing.T) {
	for _, c := range []struct {
		v    Value
		unit string
		want string
	}{
		{Value{48.2, 0.31}, UnitOhm, "48.20 ± 0.62 Ω"},
		{Value{24.99375e6, 0.04}, UnitHertz, "24.993750000 MHz ± 80 mHz"},
		{Value{5.5e-15, 2.2e-17}, UnitFarad, "5.500 ± 0.044 fF"},
		{Value{1.6e-12, 0.02e-12}, UnitFarad, "1.600 ± 0.040 pF"},
		{Value{-3.21, 0.12}, UnitPPM, "−3.21 ± 0.24 ppm"},
		{Value{61234, 220}, UnitNone, "61234 ± 440"},
		{Value{38e3, 0}, UnitOhm, "38 kΩ"},
		{Value{0, 0}, UnitPPM, "0 ppm"},
	} {
		if got := Format(c.v, c.unit); got != c.want {
			t.Errorf("Format(%v, %s) = %q, want %q", c.v, c.unit, got, c.want)
		}
	}
	if got := FormatBound(-400, UnitOhm); got != "−400 Ω" {
		t.Errorf("FormatBound = %q", got)
	}
}

// TestTextOfBrokenLimit is the sentence that an operator reads.
func TestTextOfBrokenLimit(t *testing.T) {
	limit := parttype.Limit{Quantity: parttype.MotionalResistance, Bounds: parttype.Bounds{Max: at(40)}}
	r := Reading{Quantity: parttype.MotionalResistance, Where: Nowhere, Unit: UnitOhm, Measured: Value{48.2, 0.31}, HasValue: true}
	f := hold(limit, r, parttype.Decision{Rule: parttype.Simple})
	const want = "Motional resistance 48.20 ± 0.62 Ω (k = 2), limit at most 40 Ω: out of limit"
	if f.Text != want {
		t.Errorf("text %q, want %q", f.Text, want)
	}
	r.SuspendedBy = []Cause{CalibrationExpired}
	if f = hold(limit, r, parttype.Decision{}); f.Outcome != Suspended || !strings.Contains(f.Text, "calibration_expired") {
		t.Errorf("suspended: %q", f.Text)
	}
}
