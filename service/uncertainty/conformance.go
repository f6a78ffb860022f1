package uncertainty

import "math"

// Conformance returns the probability that a quantity lies within lower..upper, given the estimate value and its standard
// uncertainty u, with a normal distribution around the estimate:
//
//	p_c = Φ((upper − y)/u) − Φ((lower − y)/u)
//
// A limit of −Inf or +Inf leaves that side open. Tails keep their relative accuracy: far outside, p_c is small but right, and far
// inside Nonconformance is. An exact value (u = 0) is in or out, limits included. A value or uncertainty that is no number, a negative
// uncertainty, and limits that hold nothing give 0: what is not known does not conform. An infinite u gives ½ with one limit, 0
// with two, 1 with none.
// Source: JCGM 106:2012, clause 7.
func Conformance(value, u, lower, upper float64) float64 {
	below, above, ok := tails(value, u, lower, upper)
	switch {
	case !ok:
		return exact(value, u, lower, upper)
	// Where one limit is beyond the estimate, the difference is taken of what lies beyond each limit on the far side: two
	// small numbers instead of two near 1.
	case below > 0.5:
		return math.Max(0, NormalTail((lower-value)/u)-above)
	case above > 0.5:
		return math.Max(0, NormalProbability((upper-value)/u)-below)
	}
	// The estimate is inside: its distance to each limit adds what lies between them, also where that is next to nothing.
	return between(value-lower, u) + between(upper-value, u)
}

// between returns the probability of the range from the estimate to a limit at the distance given.
func between(distance, u float64) float64 {
	if math.IsInf(distance, 1) {
		return 0.5 // an open end, with an infinite u too
	}
	return 0.5 * math.Erf(distance/u/math.Sqrt2)
}

// Nonconformance returns 1 − Conformance without subtracting from 1: the sum of the two tails beyond the limits. With a wide u both
// count.
func Nonconformance(value, u, lower, upper float64) float64 {
	below, above, ok := tails(value, u, lower, upper)
	if !ok {
		return 1 - exact(value, u, lower, upper)
	}
	return math.Min(1, below+above)
}

// tails returns the probabilities below and above the limits. ok is false when the estimate is exact or none, or when the limits
// hold nothing.
func tails(value, u, lower, upper float64) (below, above float64, ok bool) {
	if !(u > 0) || math.IsNaN(value) || math.IsInf(value, 0) || !(lower <= upper) {
		return 0, 0, false
	}
	// An open end is left out rather than computed: with an infinite u it would be Inf/Inf.
	if !math.IsInf(lower, -1) {
		below = NormalProbability((lower - value) / u)
	}
	if !math.IsInf(upper, 1) {
		above = NormalTail((upper - value) / u)
	}
	return below, above, true
}

// exact returns 1 for an exact value inside the limits and 0 for everything else.
func exact(value, u, lower, upper float64) float64 {
	if u == 0 && value >= lower && value <= upper {
		return 1
	}
	return 0
}

// GuardFactor returns g for which an estimate that lies g u inside a single limit conforms with the given probability:
// Φ⁻¹(confidence), 1.645 for 0.95. Source: JCGM 106:2012, 7.3 and table 1.
func GuardFactor(confidence float64) float64 { return NormalQuantile(confidence) }
