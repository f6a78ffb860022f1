package uncertainty

import "math"

// Component is one independent part of a scalar uncertainty: its standard uncertainty, in the units of the result (the
// sensitivity coefficient is inside), and the degrees of freedom it rests on. Freedom ≤ 0 or +Inf means known exactly.
type Component struct {
	Uncertainty float64
	Freedom     float64
}

// EffectiveFreedom returns the degrees of freedom of √(Σ u_i²),
//
//	ν = u_c⁴ / Σ (u_i⁴/ν_i)
//
// +Inf when every component is known exactly. Source: the Welch-Satterthwaite formula, JCGM 100:2008, equation (G.2b).
func EffectiveFreedom(components ...Component) float64 {
	var combined, largest float64
	for _, c := range components {
		combined = math.Hypot(combined, c.Uncertainty)
		largest = max(largest, math.Abs(c.Uncertainty))
	}
	if combined == 0 || math.IsInf(largest, 0) {
		return math.Inf(1)
	}
	var sum float64
	for _, c := range components {
		if c.Freedom > 0 && !math.IsInf(c.Freedom, 1) {
			share := c.Uncertainty / combined
			sum += share * share * share * share / c.Freedom
		}
	}
	if sum == 0 {
		return math.Inf(1)
	}
	return 1 / sum
}

// TruncatedFreedom returns ν cut to the next lower whole number, at least 1, as a t-table asks for. Source: JCGM 100:2008, G.4.1.
func TruncatedFreedom(freedom float64) float64 { return max(1, math.Floor(freedom)) }

// FreedomOfRelative returns the degrees of freedom of a standard uncertainty that is itself only known to the relative standard
// uncertainty given, ν ≈ ½ (Δu/u)⁻². Source: JCGM 100:2008, equation (G.3).
func FreedomOfRelative(relative float64) float64 { return 1 / (2 * relative * relative) }

// CoverageFactor returns k such that ±k u holds the value with the given probability, 0 < confidence < 1: the Student quantile of
// (1 + confidence)/2 with the degrees of freedom truncated. Source: JCGM 100:2008, G.3.4 and G.4.1.
func CoverageFactor(confidence, freedom float64) float64 {
	if !(confidence > 0 && confidence < 1) || !(freedom > 0) {
		return math.NaN()
	}
	// The upper tail (1 − confidence)/2 keeps the digits that (1 + confidence)/2 would round away.
	return -StudentQuantile((1-confidence)/2, TruncatedFreedom(freedom))
}

// Expand returns the expanded uncertainty U = k u and its k. Source: JCGM 100:2008, equation (18).
func Expand(standardUncertainty, freedom, confidence float64) (expanded, factor float64) {
	factor = CoverageFactor(confidence, freedom)
	return factor * standardUncertainty, factor
}
