package verdict

import (
	"math"
	"strings"
	"testing"

	"example.com/admit/service/parttype"
)

// TestMeanOfReadings: three readings of 38, 39 and 41 with an individual part of 0.3 and a common one of 0.4.
func TestMeanOfReadings(t *testing.T) {
	reading := func(v float64) Reading {
		return Reading{Quantity: parttype.MotionalResistance, Where: Nowhere, Unit: UnitOhm, HasValue: true, Measured: Value{v, 0.5}, CommonUncertainty: 0.4}
	}
	limit := parttype.Limit{Quantity: parttype.MotionalResistance, Bounds: parttype.Bounds{Max: at(45)}}
	decision := parttype.Decision{Rule: parttype.GuardedAcceptance, Confidence: 0.95}
	var past []Past
	for n, c := range []struct{ value, mean, u float64 }{
		{38, 38, 0.5}, {39, 38.5, math.Hypot(0.3/math.Sqrt2, 0.4)}, {41, 118.0 / 3, math.Hypot(0.3/math.Sqrt(3), 0.4)},
	} {
		f := Hold(limit, reading(c.value), past, decision)
		if math.Abs(f.Measured.Value-c.mean) > 1e-12 || math.Abs(f.Measured.StandardUncertainty-c.u) > 1e-12 || f.Readings != n+1 || math.Abs(f.CommonUncertainty-0.4) > 1e-12 {
			t.Errorf("after %d: %+v, want %g with %g", n+1, f, c.mean, c.u)
		}
		p, ok := PastOf(&f)
		if !ok {
			t.Fatalf("after %d: no valid reading: %s", n+1, f.Text)
		}
		past = []Past{p}
	}
	// Not valid: suspended, too vague to be held against the limit, of another limit.
	bad := reading(80)
	bad.SuspendedBy = []Cause{UnstableContact}
	if f := Hold(limit, bad, past, decision); f.Readings > 1 || f.Measured.Value != 80 {
		t.Errorf("a suspended reading enters the mean: %+v", f)
	} else if _, ok := PastOf(&f); ok {
		t.Error("a suspended reading is handed on")
	}
	vague := reading(41)
	vague.Measured.StandardUncertainty = 20
	f, sharp := weighOne(limit, vague, past, decision)
	if _, ok := PastOf(&f); ok || sharp {
		t.Errorf("a vague reading is handed on: %+v", f)
	}
	past[0].Where.DriveStep = 2
	if f := Hold(limit, reading(38), past, decision); f.Readings != 1 {
		t.Errorf("the mean of another limit is taken: %+v", f)
	}
}

// TestExtremeOfSeveralLevels: five levels 1.9 standard uncertainties below their limit. Each conforms with 97.1 %; all of them with 86.5 % when they
// have nothing in common, and with nearly 97.1 % when they share all their errors.
func TestExtremeOfSeveralLevels(t *testing.T) {
	const n = 5
	for _, c := range []struct {
		name       string
		rho        float64
		rule       parttype.Rule
		value      float64
		want       Outcome // of the nearest to its limit
		verdict    Verdict
		loLo, hiHi float64 // of its probability
	}{
		{"apart", 0, parttype.GuardedAcceptance, 58.1, Undecided, Retest, 0.861, 0.869},
		{"half shared", 0.5, parttype.GuardedAcceptance, 58.1, Undecided, Retest, 0.88, 0.92},
		{"all shared", 1, parttype.GuardedAcceptance, 58.1, Conforms, Pass, 0.971, 0.972},
		{"apart, but far inside", 0, parttype.GuardedAcceptance, 57, Conforms, Pass, 0.998, 0.999},
		{"apart, simple rule", 0, parttype.Simple, 58.1, Conforms, Pass, 0.971, 0.972},
		{"certain that one is out", 0, parttype.GuardedRejection, 59.9, Violates, Fail, 0.02, 0.05},
	} {
		ev := Evidence{Joint: []Joint{{Individual: make([]float64, n*n), Common: make([]float64, n*n)}}}
		for k := range n {
			where := Nowhere
			where.DriveStep = k
			ev.Limits = append(ev.Limits, parttype.Limit{Quantity: parttype.DriveMotionalResistance, Bounds: parttype.Bounds{Max: at(60)}})
			ev.Readings = append(ev.Readings, Reading{
				Quantity: parttype.DriveMotionalResistance, Where: where, Unit: UnitOhm, HasValue: true,
				Measured: Value{c.value, 1}, CommonUncertainty: math.Sqrt(c.rho),
			})
			ev.Joint[0].Members = append(ev.Joint[0].Members, k)
			for l := range n {
				ev.Joint[0].Common[k*n+l] = c.rho
			}
			ev.Joint[0].Individual[k*n+k] = 1 - c.rho
		}
		j := Weigh(parttype.Decision{Rule: c.rule, Confidence: 0.95, Attempts: 2}, ev)
		f := j.Findings[0]
		if f.Outcome != c.want || j.Verdict != c.verdict || f.ConformanceProbability < c.loLo || f.ConformanceProbability > c.hiHi {
			t.Errorf("%s: %s, %s with %.4f: %s", c.name, j.Verdict, f.Outcome, f.ConformanceProbability, f.Text)
		}
		if c.want == Undecided && !strings.Contains(f.Text, "each of 5 levels conforms") {
			t.Errorf("%s: %q does not say why", c.name, f.Text)
		}
	}
}

// TestGrades: nested limit sets need their certainty, so that a value in a guard band falls to the next; of bins side by side the inner borders decide by
// the value alone.
func TestGrades(t *testing.T) {
	frequency := func(low, high *float64) []parttype.Limit {
		return []parttype.Limit{{Quantity: parttype.FrequencyDeviation, Of: parttype.LoadResonance, Bounds: parttype.Bounds{Min: low, Max: high}}}
	}
	nested := &parttype.Grades{Of: []parttype.Grade{{Name: "A", Limits: frequency(at(-5), at(5))}, {Name: "B", Limits: frequency(at(-8), at(8))}, {Name: "C"}}}
	bins := &parttype.Grades{Adjacent: true, Of: []parttype.Grade{
		{Name: "low", Limits: frequency(at(-10), at(-3))}, {Name: "middle", Limits: frequency(at(-3), at(3))}, {Name: "high", Limits: frequency(at(3), at(10))},
	}}
	decision := parttype.Decision{Rule: parttype.GuardedAcceptance, Confidence: 0.95}
	for _, c := range []struct {
		name   string
		grades *parttype.Grades
		ppm    float64
		want   string
	}{
		{"nested, in the first", nested, 4.1, "A"}, {"nested, in its guard band", nested, 4.6, "B"}, {"nested, in that of the second", nested, -7.7, "C"},
		{"bins, middle", bins, 2.99, "middle"}, {"bins, just over the border", bins, 3.01, "high"}, {"bins, on the border", bins, 3, "middle"},
		{"bins, below", bins, -3.01, "low"}, {"bins, in the guard band of the outer border", bins, 9.5, ""}, {"bins, outside", bins, -12, ""},
		{"no grades", nil, 1, ""},
	} {
		var readings [][]Reading
		if c.grades != nil {
			for _, g := range c.grades.Of {
				var of []Reading
				for range g.Limits {
					of = append(of, Reading{Quantity: parttype.FrequencyDeviation, Where: Nowhere, Unit: UnitPPM, HasValue: true, Measured: Value{c.ppm, 0.5}})
				}
				readings = append(readings, of)
			}
		}
		if got := Grade(c.grades, decision, readings); got != c.want {
			t.Errorf("%s: grade %q, want %q", c.name, got, c.want)
		}
	}
	suspended := [][]Reading{{{Quantity: parttype.FrequencyDeviation, HasValue: true, Measured: Value{0, 0.1}, SuspendedBy: []Cause{ReferenceUnlocked}}}, {{HasValue: false}}, nil}
	if got := Grade(nested, decision, suspended); got != "C" {
		t.Errorf("grade %q by readings that must not be judged", got)
	}
}

// TestDispositions: what becomes of a unit, by verdict and attempt.
func TestDispositions(t *testing.T) {
	limit := parttype.Limit{Quantity: parttype.MotionalResistance, Bounds: parttype.Bounds{Max: at(40)}}
	reading := func(v float64) []Reading {
		return []Reading{{Quantity: limit.Quantity, Where: Nowhere, Unit: UnitOhm, HasValue: true, Measured: Value{v, 0.5}}}
	}
	station := []RetestCause{NewCause(CalibrationExpired, "yesterday")}
	for _, c := range []struct {
		name        string
		value       float64
		causes      []RetestCause
		used        int
		after       string
		uncounted   bool
		condemned   string
		verdict     Verdict
		disposition Disposition
	}{
		{"good", 30, nil, 0, parttype.SetAside, false, "", Pass, Passed},
		{"bad", 50, nil, 0, parttype.SetAside, false, "", Fail, Failed},
		{"undecided, one attempt left", 39.8, nil, 0, parttype.SetAside, false, "", Retest, NoDisposition},
		{"undecided, the last", 39.8, nil, 1, parttype.SetAside, false, "", Retest, SetAside},
		{"undecided, the last, fails", 39.8, nil, 1, parttype.Fail, false, "", Fail, Failed},
		{"the station's fault is no attempt", 30, station, 1, parttype.Fail, false, "", Retest, NoDisposition},
		{"undecided with the station at fault too", 39.8, station, 1, parttype.Fail, false, "", Fail, Failed},
		{"good in the last", 30, nil, 1, parttype.SetAside, false, "", Pass, Passed},
		{"good when it is too late", 30, nil, 2, parttype.SetAside, false, "", Retest, SetAside},
		{"good when it is too late, fails", 30, nil, 2, parttype.Fail, false, "", Fail, Failed},
		{"condemned", 30, nil, 0, parttype.SetAside, false, "twice high at low drive", Fail, Failed},
		{"a study disposes of nothing", 30, nil, 5, parttype.SetAside, true, "", Pass, NoDisposition},
		{"nor does it of an undecided one", 39.8, nil, 5, parttype.Fail, true, "", Retest, NoDisposition},
	} {
		j := Weigh(parttype.Decision{Rule: parttype.GuardedAcceptance, Confidence: 0.95, Attempts: 2, AfterLastAttempt: c.after}, Evidence{
			Limits: []parttype.Limit{limit}, Readings: reading(c.value), Causes: c.causes, AttemptsUsed: c.used, Uncounted: c.uncounted, Condemned: c.condemned,
		})
		if j.Verdict != c.verdict || j.Disposition != c.disposition {
			t.Errorf("%s: %s %q, want %s %q", c.name, j.Verdict, j.Disposition, c.verdict, c.disposition)
		}
		if j.Verdict == Retest && len(j.RetestCauses) == 0 || j.Verdict != Pass && len(j.Reasons()) == 0 || j.Verdict != Pass && len(j.Advice()) == 0 {
			t.Errorf("%s: causes %v, reasons %q, advice %q", c.name, j.RetestCauses, j.Reasons(), j.Advice())
		}
	}
}

// TestUnseen: a response that was looked for and not seen meets a least suppression up to what would have been seen, and breaks a greatest one below it.
func TestUnseen(t *testing.T) {
	for _, c := range []struct {
		bounds parttype.Bounds
		want   Outcome
	}{
		{parttype.Bounds{Min: at(10)}, Conforms}, {parttype.Bounds{Min: at(30)}, Conforms}, {parttype.Bounds{Min: at(31)}, Undecided},
		{parttype.Bounds{Max: at(10)}, Violates}, {parttype.Bounds{Max: at(31)}, Undecided}, {parttype.Bounds{Min: at(10), Max: at(50)}, Undecided},
	} {
		r := Reading{Quantity: parttype.OvertoneSuppression, Where: Where{DriveStep: -1, Order: 3}, Unit: UnitDecibel, Unseen: &Unseen{AtLeast: 30, Probability: 0.95}}
		f := Hold(parttype.Limit{Quantity: r.Quantity, Bounds: c.bounds}, r, nil, parttype.Decision{Rule: parttype.GuardedAcceptance, Confidence: 0.95})
		if f.Outcome != c.want || f.HasValue || !strings.Contains(f.Text, "no response was seen") {
			t.Errorf("%v: %s, %s", limitText(c.bounds, UnitDecibel), f.Outcome, f.Text)
		}
		r.SuspendedBy = []Cause{SurveyTooCoarse}
		if f := Hold(parttype.Limit{Quantity: r.Quantity, Bounds: c.bounds}, r, nil, parttype.Decision{}); f.Outcome != Suspended {
			t.Errorf("suspended: %s", f.Text)
		}
	}
}
