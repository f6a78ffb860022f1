package verdict

import (
	"math"

	"example.com/admit/service/parttype"
)

// Past is what earlier attempts say of one limit: the mean of their valid readings.
type Past struct {
	Quantity          parttype.Quantity
	Where             Where
	Mean              Value
	CommonUncertainty float64
	Readings          int
}

// PastOf returns what a judged finding hands on to later attempts; false where it was no valid reading.
func PastOf(f *Finding) (Past, bool) {
	if !f.HasValue || f.Outcome == Suspended || f.Readings < 1 {
		return Past{}, false
	}
	return Past{Quantity: f.Quantity, Where: f.Where, Mean: f.Measured, CommonUncertainty: f.CommonUncertainty, Readings: f.Readings}, true
}

// With returns the reading as the mean of itself and of the earlier valid ones, each attempt with the same weight: to look again until
// one reading fits would be to accept bad units. What the readings have in common (standards, drift, clock) stays as it is; what is new at every
// insertion and every sample (contact, noise) averages out:
//
//	u^2 = (sum of individual^2)/n^2 + ((sum of common)/n)^2
//
// The common parts are taken to be wholly the same, which can only be too careful.
func (r Reading) With(p Past) Reading {
	if !r.HasValue || p.Readings < 1 {
		return r
	}
	n := float64(p.Readings)
	individual := math.Hypot(n*individualOf(p.Mean.StandardUncertainty, p.CommonUncertainty), individualOf(r.Measured.StandardUncertainty, r.CommonUncertainty)) / (n + 1)
	r.CommonUncertainty = (n*p.CommonUncertainty + r.CommonUncertainty) / (n + 1)
	r.Measured.Value = (n*p.Mean.Value + r.Measured.Value) / (n + 1)
	r.Measured.StandardUncertainty = math.Hypot(individual, r.CommonUncertainty)
	r.Readings = p.Readings + 1
	return r
}

// individualOf returns what is left of a standard uncertainty without its common part.
func individualOf(total, common float64) float64 {
	return math.Sqrt(math.Max(0, total*total-common*common))
}
