package verdict

import (
	"math"

	"example.com/admit/service/parttype"
	"example.com/admit/service/uncertainty"
)

// Operating says how a limit treats units of a known true value, over all attempts: what its decision rule risks. A reading is off by a common part,
// which every attempt shares, and by an individual one, drawn anew; each attempt is judged on the mean of the readings so far.
type Operating struct {
	Rule               parttype.Rule
	Confidence         float64
	Bounds             parttype.Bounds
	Individual, Common float64 // standard uncertainties
	Attempts           int     // at least 1
}

// Accept returns the probability that a unit with a true value is accepted in one of its attempts, to about 1e-6.
//
// At a limit itself, under guarded acceptance, the first attempt accepts with 1 - confidence; each further one adds a little, the less, the more of the
// uncertainty is common. That is the price of looking again, and it is small only because all readings count.
func (o Operating) Accept(value float64) float64 { return o.prepare().accept(value) }

// Risk returns the global risks of the limit for a population (JCGM 106:2012, clause 9), over all attempts.
func (o Operating) Risk(population uncertainty.Distribution) uncertainty.Risk {
	u := math.Hypot(o.Individual, o.Common)
	tolerance := intervalOf(o.Bounds)
	var breaks []float64
	for _, limit := range []float64{tolerance.Lower, tolerance.Upper} {
		for k := -6.0; k <= 6; k++ {
			breaks = append(breaks, limit+k*u)
		}
	}
	return uncertainty.RiskOf(population, tolerance, o.prepare().accept, breaks...)
}

// looking is an Operating with the regions of each attempt at hand.
type looking struct {
	Operating
	accepted, alive []uncertainty.Interval
}

func (o Operating) prepare() *looking {
	l := &looking{Operating: o}
	for n := 1; n <= max(1, o.Attempts); n++ {
		accepted, alive := o.regions(math.Hypot(o.Individual/math.Sqrt(float64(n)), o.Common))
		l.accepted, l.alive = append(l.accepted, accepted), append(l.alive, alive)
	}
	return l
}

// accept averages over the common part.
func (o *looking) accept(value float64) float64 {
	if o.Common == 0 {
		return o.acceptFrom(1, 0, value)
	}
	var sum float64
	const panels, reach = 4, 5.5
	for k := range panels {
		low := -reach + 2*reach*float64(k)/panels
		uncertainty.Integrate(low, low+2*reach/panels, func(z, weight float64) {
			sum += weight * math.Exp(-z*z/2) / math.Sqrt(2*math.Pi) * o.acceptFrom(1, 0, value+z*o.Common)
		})
	}
	return sum
}

func intervalOf(b parttype.Bounds) uncertainty.Interval {
	i := uncertainty.Unbounded()
	if b.Min != nil {
		i.Lower = *b.Min
	}
	if b.Max != nil {
		i.Upper = *b.Max
	}
	return i
}

// acceptFrom returns the probability of acceptance in attempt n or later, with the mean of the readings before.
func (o *looking) acceptFrom(n int, before, mean float64) float64 {
	k := float64(n)
	accepted, alive := o.accepted[n-1], o.alive[n-1]
	// The mean of n readings, of which n-1 are known, is normal about (k-1)/k before + mean/k.
	centre, spread := mean, o.Individual
	if n > 1 {
		centre, spread = ((k-1)*before+mean)/k, o.Individual/k
	}
	p := uncertainty.Conformance(centre, spread, accepted.Lower, accepted.Upper)
	if n == len(o.accepted) || spread == 0 {
		return p
	}
	density := func(x float64) float64 {
		z := (x - centre) / spread
		return math.Exp(-z*z/2) / (spread * math.Sqrt(2*math.Pi))
	}
	around := uncertainty.Around(centre, 7*spread)
	for _, open := range []uncertainty.Interval{{Lower: alive.Lower, Upper: math.Min(accepted.Lower, alive.Upper)}, {Lower: math.Max(accepted.Upper, alive.Lower), Upper: alive.Upper}} {
		if accepted.Empty() {
			open = alive
		}
		open = open.Intersect(around)
		if open.Empty() {
			continue
		}
		uncertainty.Integrate(open.Lower, open.Upper, func(x, weight float64) {
			p += weight * density(x) * o.acceptFrom(n+1, x, mean)
		})
		if accepted.Empty() {
			break
		}
	}
	return p
}

// regions returns where a mean with an uncertainty is accepted, and where it is not rejected; the first lies within the second.
func (o Operating) regions(u float64) (accepted, alive uncertainty.Interval) {
	tolerance := intervalOf(o.Bounds)
	outcome := func(v float64) Outcome {
		return Decide(o.Rule, o.Confidence, v, o.Bounds, Conformance(Value{v, u}, o.Bounds))
	}
	middle := (tolerance.Lower + tolerance.Upper) / 2
	switch {
	case math.IsInf(tolerance.Lower, -1):
		middle = tolerance.Upper - 40*u
	case math.IsInf(tolerance.Upper, 1):
		middle = tolerance.Lower + 40*u
	}
	edge := func(limit float64, good func(Outcome) bool) float64 {
		if math.IsInf(limit, 0) {
			return limit
		}
		inside, outside := middle, limit+math.Copysign(40*u, limit-middle)
		for range 60 {
			if x := (inside + outside) / 2; good(outcome(x)) {
				inside = x
			} else {
				outside = x
			}
		}
		return inside
	}
	conforms := func(f Outcome) bool { return f == Conforms }
	open := func(f Outcome) bool { return f != Violates }
	alive = uncertainty.Interval{Lower: edge(tolerance.Lower, open), Upper: edge(tolerance.Upper, open)}
	if !conforms(outcome(middle)) {
		return uncertainty.Interval{Lower: 1, Upper: 0}, alive
	}
	return uncertainty.Interval{Lower: edge(tolerance.Lower, conforms), Upper: edge(tolerance.Upper, conforms)}, alive
}
