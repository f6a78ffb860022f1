package verdict

import (
	"math"

	"example.com/admit/service/parttype"
	"example.com/admit/service/uncertainty"
)

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

// sharpEnough reports whether a reading is certain enough to be held against a limit: either it is clear by itself, with the asked confidence,
// that it conforms or that it does not; or its uncertainty at that confidence is at most a quarter of the tolerance, which for a limit on
// one side is the span from 0 to it. What is vaguer than that and near a limit would be accepted or rejected for the measurement's sake,
// not the unit's. A quarter: common practice, no source.
func sharpEnough(v Value, limit parttype.Limit, decision parttype.Decision) bool {
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
	// Not conforming is clear beyond one limit only: of a value as vague as the whole tolerance, most lies outside wherever it is.
	beyond := func(end *float64, sign float64) bool {
		return end != nil && v.StandardUncertainty > 0 && uncertainty.NormalProbability(sign*(v.Value-*end)/v.StandardUncertainty) >= confidence
	}
	clear := Conformance(v, limit.Bounds) >= confidence || beyond(limit.Bounds.Max, 1) || beyond(limit.Bounds.Min, -1)
	return clear || uncertainty.NormalQuantile(confidence)*v.StandardUncertainty <= width/4
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
	inside := within(value, b)
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
