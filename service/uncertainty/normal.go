package uncertainty

import "math"

// NormalProbability returns Φ(z) = ½ erfc(−z/√2), the probability of a standard normal variable below z. The lower tail keeps its
// relative accuracy (about 1e-15 to z = −10, 1e-13 at −37); for the upper one use NormalTail. Φ(−Inf) = 0, Φ(+Inf) = 1.
func NormalProbability(z float64) float64 { return 0.5 * math.Erfc(-z/math.Sqrt2) }

// NormalTail returns 1 − Φ(z) without subtracting from 1.
func NormalTail(z float64) float64 { return 0.5 * math.Erfc(z/math.Sqrt2) }

// NormalQuantile returns z with Φ(z) = p for 0 ≤ p ≤ 1: −Inf at 0, +Inf at 1, NaN outside.
//
// Near the middle it is √2 erf⁻¹(2p − 1). In the tails, where 2p − 1 would round p away, the leading terms of the asymptotic
// expansion start Halley's method on ln Φ(z) = ln p; relative accuracy is a few 1e-16 down to the smallest p. p above ½ is as
// accurate as 1 − p is: for a small upper tail q use −NormalQuantile(q).
func NormalQuantile(p float64) float64 {
	switch {
	case !(p >= 0 && p <= 1):
		return math.NaN()
	case p >= 0.25 && p <= 0.75:
		return math.Sqrt2 * math.Erfinv(2*p-1) // 2p − 1 is exact here
	case p > 0.75:
		return -lowerQuantile(1 - p) // so is 1 − p
	}
	return lowerQuantile(p)
}

// lowerQuantile is NormalQuantile for p ≤ ¼.
func lowerQuantile(p float64) float64 {
	if p == 0 {
		return math.Inf(-1)
	}
	logP := math.Log(p)
	// For large z the tail is φ(z)/z: z² = −2 ln(p z √2π), taken twice around.
	s := -2 * logP
	z := math.Sqrt(s - math.Log(2*math.Pi*max(s-math.Log(2*math.Pi*s), 0.4)))
	if !(z > 0.5) {
		z = 0.5
	}
	for range 20 {
		tail := NormalTail(z)
		if tail == 0 { // beyond the range of the tail; the start is good to all that is left there
			break
		}
		// With g = ln(tail) − ln p: g' = −m, m = φ(z)/tail, and g'' = −m(m − z). The ratio m has no small numbers in it.
		g := math.Log(tail) - logP
		m := math.Exp(-z*z/2 - 0.5*math.Log(2*math.Pi) - math.Log(tail))
		newton := g / m
		step := newton / (1 - newton*(m-z)/2)
		z += step
		if math.Abs(step) <= 1e-9*z { // cubic convergence: the next step would be in the rounding
			break
		}
	}
	return -z
}
