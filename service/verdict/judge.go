package verdict

import (
	"fmt"
	"math"
	"strings"

	"example.com/admit/service/parttype"
	"example.com/admit/service/uncertainty"
)

// Reading is what was measured for one limit. A reading that rests on a sweep which cannot be trusted names why in SuspendedBy; a value
// known all the same is shown, never judged.
type Reading struct {
	Quantity    parttype.Quantity
	Where       Where
	Unit        string
	Measured    Value
	HasValue    bool
	SuspendedBy []Cause
	Note        string // why there is no value, in words, when there is none
}

// Evidence is everything that Judge weighs: one reading for every limit in the order of Limits, and the retest causes found.
type Evidence struct {
	Limits []parttype.Limit
	// Readings stand beside Limits, one each.
	Readings []Reading
	Causes   []RetestCause
}

// Weigh holds every limit against its reading and gives the verdict by the rules of precedence: a limit clearly broken on a valid sweep
// is a fail; otherwise any suspended or undecided limit is a retest; else pass. A retest cause that suspends no limit still forbids a
// pass: what it says of the measurement holds for the unit. The other fields of the Judgement are the caller's.
func Weigh(decision parttype.Decision, ev Evidence) Judgement {
	j := Judgement{RetestCauses: append([]RetestCause(nil), ev.Causes...)}
	var broken, open bool
	var undecided, vague []string
	for i, limit := range ev.Limits {
		r := ev.Readings[i]
		if len(r.SuspendedBy) == 0 && r.HasValue && !sharp(r.Measured, limit, decision) {
			r.SuspendedBy = []Cause{TooNoisy}
			r.Note = "its uncertainty leaves too little of the tolerance to decide anything"
			vague = append(vague, Label(limit.Quantity, r.Where))
		}
		f := hold(limit, r, decision)
		switch f.Outcome {
		case Violates:
			broken = true
		case Undecided:
			open = true
			undecided = append(undecided, f.Text)
		case Suspended:
			open = true
		}
		j.Findings = append(j.Findings, f)
	}
	if len(vague) > 0 && !named(j.RetestCauses, TooNoisy) {
		j.RetestCauses = append(j.RetestCauses, NewCause(TooNoisy, "Too uncertain to be held against its limit: "+strings.Join(vague, ", ")+"."))
	}
	if len(undecided) > 0 {
		j.RetestCauses = append(j.RetestCauses, NewCause(UndecidedAtLimit, undecided[0]))
	}
	switch {
	case broken:
		j.Verdict = Fail
	case open || len(j.RetestCauses) > 0 || len(ev.Limits) == 0:
		j.Verdict = Retest
	default:
		j.Verdict = Pass
	}
	return j
}

// hold weighs one limit.
func hold(limit parttype.Limit, r Reading, decision parttype.Decision) Finding {
	f := Finding{Quantity: limit.Quantity, Where: r.Where, Unit: r.Unit, Bounds: limit.Bounds}
	usable := r.HasValue && finite(r.Measured.Value) && finite(r.Measured.StandardUncertainty) && r.Measured.StandardUncertainty >= 0
	if usable {
		f.Measured, f.HasValue = r.Measured, true
	}
	if len(r.SuspendedBy) > 0 || !usable {
		f.Outcome = Suspended
		f.Text = suspendedText(f, r)
		return f
	}
	rule, confidence := ruleOf(limit, decision)
	f.ConformanceProbability = Conformance(r.Measured, limit.Bounds)
	f.Outcome = Decide(rule, confidence, r.Measured.Value, limit.Bounds, f.ConformanceProbability)
	f.Text = findingText(f, rule, confidence)
	return f
}

// ruleOf returns the rule and the confidence that hold for a limit: its own, else the part type's.
func ruleOf(limit parttype.Limit, decision parttype.Decision) (parttype.Rule, float64) {
	rule, confidence := decision.Rule, decision.Confidence
	if limit.Decide.Rule != "" {
		rule = limit.Decide.Rule
	}
	if limit.Decide.Confidence != 0 {
		confidence = limit.Decide.Confidence
	}
	return rule, confidence
}

// sharp reports whether a reading is certain enough to be held against a limit at all: its uncertainty at the limit's confidence is at
// most half of the tolerance, which for a limit on one side is the span from 0 to it. Anything vaguer could not be accepted wherever it
// lay, and would be rejected for the measurement's sake, not the unit's.
func sharp(v Value, limit parttype.Limit, decision parttype.Decision) bool {
	_, confidence := ruleOf(limit, decision)
	var width float64
	switch b := limit.Bounds; {
	case b.Min != nil && b.Max != nil:
		width = *b.Max - *b.Min
	case b.Max != nil:
		width = math.Abs(*b.Max)
	case b.Min != nil:
		width = math.Abs(*b.Min)
	}
	if width == 0 || confidence <= 0.5 {
		return true // a limit at 0, or a rule without confidence: there is nothing to measure the uncertainty by
	}
	return uncertainty.NormalQuantile(confidence)*v.StandardUncertainty <= width/2
}

func named(causes []RetestCause, c Cause) bool {
	for _, k := range causes {
		if k.Cause == c {
			return true
		}
	}
	return false
}

// Conformance returns the probability that the true value lies within the bounds, for a normal distribution about the measured value
// (JCGM 106:2012, clause 7). Without uncertainty it is 0 or 1.
func Conformance(v Value, b parttype.Bounds) float64 {
	lower, upper := math.Inf(-1), math.Inf(1)
	if b.Min != nil {
		lower = *b.Min
	}
	if b.Max != nil {
		upper = *b.Max
	}
	if v.StandardUncertainty == 0 {
		if v.Value >= lower && v.Value <= upper {
			return 1
		}
		return 0
	}
	return uncertainty.Conformance(v.Value, v.StandardUncertainty, lower, upper)
}

// Decide applies a decision rule (JCGM 106:2012 clause 8, with the guard band of guarded acceptance made a third answer, because a
// unit can be measured again). Simple: the measured value against the limits. Guarded acceptance: conforms with at least the stated
// probability of conformance, violates outside the limits, undecided between. Guarded rejection: violates with at least that probability
// of non-conformance, conforms otherwise. Guarded both: each needs its certainty, and between them it is undecided.
func Decide(rule parttype.Rule, confidence, value float64, b parttype.Bounds, conformance float64) Outcome {
	inside := (b.Min == nil || value >= *b.Min) && (b.Max == nil || value <= *b.Max)
	accepted, rejected := conformance >= confidence, 1-conformance >= confidence
	switch rule {
	case parttype.GuardedAcceptance:
		rejected = !inside
	case parttype.GuardedRejection:
		accepted = !rejected
	case parttype.GuardedBoth:
	default:
		accepted, rejected = inside, !inside
	}
	switch {
	case rejected:
		return Violates
	case accepted:
		return Conforms
	}
	return Undecided
}

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }

// findingText says what was measured, against what, and how that came out.
func findingText(f Finding, rule parttype.Rule, confidence float64) string {
	text := fmt.Sprintf("%s %s (k = 2), %s", Label(f.Quantity, f.Where), Format(f.Measured, f.Unit), limitText(f.Bounds, f.Unit))
	inside := Decide(parttype.Simple, 0, f.Measured.Value, f.Bounds, 0) == Conforms
	switch {
	case f.Outcome == Conforms && inside:
		return text + ": conforms"
	case f.Outcome == Conforms:
		return text + fmt.Sprintf(": outside, but not with the %s %% certainty that %s asks for", percent(confidence), rule)
	case f.Outcome == Undecided:
		return text + fmt.Sprintf(": too close to decide, conformance probability %s %%, %s asks for %s %%", percent(f.ConformanceProbability), rule, percent(confidence))
	}
	return text + ": out of limit"
}

// suspendedText says why a limit was not judged, and shows what is known all the same.
func suspendedText(f Finding, r Reading) string {
	text := Label(f.Quantity, f.Where) + " not judged"
	if len(r.SuspendedBy) > 0 {
		text += fmt.Sprintf(" (%s)", r.SuspendedBy[0])
	}
	if r.Note != "" {
		text += ": " + r.Note
	}
	if f.HasValue {
		text += fmt.Sprintf("; reading %s (k = 2)", Format(f.Measured, f.Unit))
	}
	return text + ", " + limitText(f.Bounds, f.Unit)
}

// limitText writes the bounds.
func limitText(b parttype.Bounds, unit string) string {
	switch {
	case b.Min != nil && b.Max != nil:
		return fmt.Sprintf("limits %s to %s", FormatBound(*b.Min, unit), FormatBound(*b.Max, unit))
	case b.Max != nil:
		return "limit at most " + FormatBound(*b.Max, unit)
	case b.Min != nil:
		return "limit at least " + FormatBound(*b.Min, unit)
	}
	return "no limit"
}

// percent writes a probability in percent with the digits that matter near 0 and 1.
func percent(p float64) string { return fmt.Sprintf("%.4g", 100*p) }

// labels are the quantities in words.
var labels = map[parttype.Quantity]string{
	parttype.FrequencyDeviation:      "Frequency deviation",
	parttype.MotionalResistance:      "Motional resistance",
	parttype.ResonanceResistance:     "Resonance resistance",
	parttype.LoadResonanceResistance: "Load resonance resistance",
	parttype.MotionalCapacitance:     "Motional capacitance",
	parttype.ShuntCapacitance:        "Shunt capacitance",
	parttype.QualityFactor:           "Quality factor",
	parttype.PullingSensitivity:      "Pulling sensitivity",
	parttype.PullingRange:            "Pulling range",
	parttype.StartMargin:             "Start margin",
	parttype.DriveResistanceRatio:    "Resistance ratio",
	parttype.DriveMotionalResistance: "Motional resistance",
	parttype.DriveFrequencyShift:     "Frequency shift",
	parttype.DriveReturnShift:        "Return shift",
	parttype.OvertoneSuppression:     "Overtone suppression",
	parttype.UnwantedModeSuppression: "Unwanted mode suppression",
}

// Label names a quantity in words, with where it was measured.
func Label(q parttype.Quantity, w Where) string {
	text := labels[q]
	if text == "" {
		text = string(q)
	}
	switch {
	case w.DriveStep >= 0:
		text += fmt.Sprintf(" at drive step %d", w.DriveStep)
	case w.Order > 0:
		text += fmt.Sprintf(" of overtone %d", w.Order)
	case w.FrequencyRatio > 0:
		text += fmt.Sprintf(" at frequency ratio %g", w.FrequencyRatio)
	case w.FromHz != 0 || w.ToHz != 0:
		text += fmt.Sprintf(" from %s to %s of the main mode", FormatBound(w.FromHz, UnitHertz), FormatBound(w.ToHz, UnitHertz))
	}
	return text
}
