package inspection

import (
	"math"

	"example.com/admit/service/crystal"
	"example.com/admit/service/resonance"
	"example.com/admit/service/uncertainty"
	"example.com/admit/service/verdict"
)

// measure returns a quantity of the fitted unit, an exact function of it, with its whole standard uncertainty; ok is false where the unit,
// or a unit within its uncertainty, has no such quantity.
func measure(est *resonance.Estimate, f func(crystal.Unit) (float64, bool)) (v verdict.Value, ok bool) {
	const n = int(resonance.Parameters)
	covariance := est.Covariance()
	var at, steps, gradient [n]float64
	var flat [n * n]float64
	for i := range n {
		at[i] = est.Value[i]
		steps[i] = math.Sqrt(math.Max(0, covariance[i][i]))
		copy(flat[i*n:], covariance[i][:])
	}
	of := func(p []float64) (float64, bool) { return f(resonance.UnitOf([resonance.Parameters]float64(p))) }
	value, ok := of(at[:])
	if !ok || math.IsNaN(value) || math.IsInf(value, 0) || !uncertainty.Gradient(of, at[:], steps[:], gradient[:]) {
		return v, false
	}
	u := math.Sqrt(uncertainty.Variance(gradient[:], flat[:]))
	return verdict.Value{Value: value, StandardUncertainty: u}, !math.IsNaN(u) && !math.IsInf(u, 0)
}
