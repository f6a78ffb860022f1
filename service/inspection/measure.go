package inspection

import (
	"math"

	"example.com/admit/service/crystal"
	"example.com/admit/service/resonance"
	"example.com/admit/service/uncertainty"
	"example.com/admit/service/verdict"
)

// influenceKey names one systematic influence. It moves every sweep of an inspection together.
type influenceKey struct{ name, group string }

// quantity is a value with all that it depends on: the noise of each sweep that it rests on, by the gradient of the value along the parameters
// of that sweep's estimate, and the named influences, by how far one standard uncertainty of each moves the value. Two quantities with
// these have a covariance, whatever sweeps they share.
type quantity struct {
	value      float64
	estimates  []*resonance.Estimate
	gradients  [][resonance.Parameters]float64 // beside estimates
	influences []influence                     // each key once
}

// influence is by how far one standard uncertainty of a systematic influence moves a value.
type influence struct {
	key   influenceKey
	shift float64
}

// add adds a shift by an influence. Influences stay in the order in which they came: sums over them are the same every time.
func (q *quantity) add(key influenceKey, shift float64) {
	if shift == 0 {
		return
	}
	for i := range q.influences {
		if q.influences[i].key == key {
			q.influences[i].shift += shift
			return
		}
	}
	q.influences = append(q.influences, influence{key, shift})
}

// shift returns by how far an influence moves the value.
func (q *quantity) shift(key influenceKey) float64 {
	for i := range q.influences {
		if q.influences[i].key == key {
			return q.influences[i].shift
		}
	}
	return 0
}

// quantityFrom returns an exact function of the fitted units of one or several sweeps as a quantity; ok is false where the units, or units within
// their uncertainty, have none. The same estimate given twice is one unit.
func quantityFrom(estimates []*resonance.Estimate, f func(units []crystal.Unit) (float64, bool)) (q quantity, ok bool) {
	const n = int(resonance.Parameters)
	at, steps := make([]float64, n*len(estimates)), make([]float64, n*len(estimates))
	place := make([]int, len(estimates)) // of each estimate, in those without repetition
	for i, est := range estimates {
		place[i] = -1
		for k, other := range q.estimates {
			if other == est {
				place[i] = k
			}
		}
		if place[i] >= 0 {
			continue
		}
		place[i] = len(q.estimates)
		covariance := est.Covariance()
		for p := range n {
			at[n*place[i]+p] = est.Value[p]
			steps[n*place[i]+p] = math.Sqrt(math.Max(0, covariance[p][p]))
		}
		q.estimates = append(q.estimates, est)
	}
	at, steps = at[:n*len(q.estimates)], steps[:n*len(q.estimates)]
	units := make([]crystal.Unit, len(estimates))
	of := func(p []float64) (float64, bool) {
		for i, k := range place {
			units[i] = resonance.UnitOf([resonance.Parameters]float64(p[n*k : n*k+n]))
		}
		return f(units)
	}
	gradient := make([]float64, len(at))
	if q.value, ok = of(at); !ok || math.IsNaN(q.value) || math.IsInf(q.value, 0) || !uncertainty.Gradient(of, at, steps, gradient) {
		return q, false
	}
	q.gradients = make([][resonance.Parameters]float64, len(q.estimates))
	for k, est := range q.estimates {
		copy(q.gradients[k][:], gradient[n*k:])
		for i := range est.Systematic {
			c := &est.Systematic[i]
			q.add(influenceKey{c.Name, c.Group}, c.Along(&q.gradients[k]))
		}
	}
	return q, true
}

// covariance returns the individual and the common part of the covariance of two quantities. Individual is what a further attempt would draw
// anew: the noise of the samples and the contact, which is made again at every insertion.
func (q *quantity) covariance(r *quantity) (individual, common float64) {
	for i, est := range q.estimates {
		for k, other := range r.estimates {
			if est != other {
				continue
			}
			for a, ga := range q.gradients[i] {
				for b, gb := range r.gradients[k] {
					if ga != 0 && gb != 0 {
						individual += ga * est.Statistical[a][b] * gb
					}
				}
			}
		}
	}
	for _, n := range q.influences {
		product := n.shift * r.shift(n.key)
		if n.key.name == contactInfluence {
			individual += product
		} else {
			common += product
		}
	}
	return individual, common
}

// measured returns the value with its whole standard uncertainty, and the common part of that.
func (q *quantity) measured() (v verdict.Value, common float64, ok bool) {
	own, shared := q.covariance(q)
	u := math.Sqrt(math.Max(0, own) + math.Max(0, shared))
	return verdict.Value{Value: q.value, StandardUncertainty: u}, math.Sqrt(math.Max(0, shared)), !math.IsNaN(u) && !math.IsInf(u, 0)
}

// measure returns a quantity of one fitted unit with its whole standard uncertainty.
func measure(est *resonance.Estimate, f func(crystal.Unit) (float64, bool)) (v verdict.Value, ok bool) {
	q, ok := quantityOfOne(est, f)
	if !ok {
		return v, false
	}
	v, _, ok = q.measured()
	return v, ok
}

func quantityOfOne(est *resonance.Estimate, f func(crystal.Unit) (float64, bool)) (quantity, bool) {
	return quantityFrom([]*resonance.Estimate{est}, func(u []crystal.Unit) (float64, bool) { return f(u[0]) })
}
