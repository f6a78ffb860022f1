package uncertainty

import (
	"math"
	"slices"
)

// Distribution is how a quantity is spread over a population.
type Distribution interface {
	Density(x float64) float64
	Mean() float64
	Deviation() float64              // standard deviation
	Support() (lower, upper float64) // outside of which the density is 0; infinite where it has no end
}

// NormalPopulation is a normal distribution.
type NormalPopulation struct{ Centre, Spread float64 }

// Density returns the density at x.
func (n NormalPopulation) Density(x float64) float64 {
	z := (x - n.Centre) / n.Spread
	return math.Exp(-z*z/2) / (n.Spread * math.Sqrt(2*math.Pi))
}

// Mean returns the mean.
func (n NormalPopulation) Mean() float64 { return n.Centre }

// Deviation returns the standard deviation.
func (n NormalPopulation) Deviation() float64 { return n.Spread }

// Support returns the whole line.
func (n NormalPopulation) Support() (lower, upper float64) { return math.Inf(-1), math.Inf(1) }

// GammaPopulation is a gamma distribution, for quantities that cannot be negative and have a long tail.
type GammaPopulation struct{ Shape, Scale float64 }

// Density returns the density at x.
func (g GammaPopulation) Density(x float64) float64 {
	if x < 0 {
		return 0
	}
	norm, _ := math.Lgamma(g.Shape)
	return math.Exp((g.Shape-1)*math.Log(x/g.Scale)-x/g.Scale-norm) / g.Scale
}

// Mean returns the mean, shape times scale.
func (g GammaPopulation) Mean() float64 { return g.Shape * g.Scale }

// Deviation returns the standard deviation.
func (g GammaPopulation) Deviation() float64 { return math.Sqrt(g.Shape) * g.Scale }

// Support returns the numbers from 0.
func (g GammaPopulation) Support() (lower, upper float64) { return 0, math.Inf(1) }

// Risk is what a decision rule does to a population.
type Risk struct {
	Consumer float64 // probability that a unit is outside its tolerance and accepted, of all units
	Producer float64 // probability that a unit is inside its tolerance and not accepted, of all units
	Accepted float64 // probability that a unit is accepted
}

// ConsumerAmongAccepted returns how many of the accepted units are outside their tolerance: another number than Consumer, and a larger one.
func (r Risk) ConsumerAmongAccepted() float64 {
	if r.Accepted == 0 {
		return 0
	}
	return r.Consumer / r.Accepted
}

// GlobalRisk returns the risks of accepting every unit whose measured value lies within the acceptance interval, for a population, a tolerance,
// and a measurement with a normal error of standard uncertainty u:
//
//	R_C = integral over eta outside the tolerance of g0(eta) P(accept | eta)
//	R_P = integral over eta inside it of g0(eta) (1 - P(accept | eta))
//
// Accuracy about 1e-12. Source: JCGM 106:2012, clause 9, equations (16) and (19).
func GlobalRisk(population Distribution, u float64, tolerance, acceptance Interval) Risk {
	return RiskOf(population, tolerance, func(eta float64) float64 { return Conformance(eta, u, acceptance.Lower, acceptance.Upper) },
		edges(u, acceptance)...)
}

// edges returns points between which the probability of acceptance is smooth on the scale of u.
func edges(u float64, acceptance Interval) []float64 {
	var points []float64
	for _, limit := range []float64{acceptance.Lower, acceptance.Upper} {
		for k := -9.0; k <= 9; k++ {
			points = append(points, limit+k*u)
		}
	}
	return points
}

// RiskOf returns the same risks for any rule, given as the probability of acceptance of a unit with the true value eta. Where that probability
// changes fast, say so with breaks: integration goes piece by piece between them.
func RiskOf(population Distribution, tolerance Interval, accept func(eta float64) float64, breaks ...float64) Risk {
	mean, deviation := population.Mean(), population.Deviation()
	lower, upper := population.Support()
	lower, upper = math.Max(lower, mean-40*deviation), math.Min(upper, mean+40*deviation)
	points := append([]float64{lower, upper, tolerance.Lower, tolerance.Upper}, breaks...)
	for k := -80.0; k <= 80; k++ {
		points = append(points, mean+k*deviation/2)
	}
	points = slices.DeleteFunc(points, func(x float64) bool { return !(x >= lower && x <= upper) })
	slices.Sort(points)
	points = slices.Compact(points)
	var r Risk
	for i := 1; i < len(points); i++ {
		middle := (points[i-1] + points[i]) / 2
		good := tolerance.Contains(middle)
		Integrate(points[i-1], points[i], func(eta, weight float64) {
			share := weight * population.Density(eta)
			accepted := accept(eta)
			r.Accepted += share * accepted
			if good {
				r.Producer += share * (1 - accepted)
			} else {
				r.Consumer += share * accepted
			}
		})
	}
	return r
}

// GuardFor returns the guard band for which the consumer's risk of a population is the one asked for: how far the acceptance limits must lie inside
// those of the tolerance, negative where they may lie outside. NaN when no guard band within twenty standard uncertainties does it.
// Source: JCGM 106:2012, 9.5.4.
func GuardFor(population Distribution, u float64, tolerance Interval, consumerRisk float64) float64 {
	excess := func(guard float64) float64 {
		acceptance := tolerance.Guard(guard)
		if acceptance.Empty() {
			return -consumerRisk
		}
		return GlobalRisk(population, u, tolerance, acceptance).Consumer - consumerRisk
	}
	low, high := -20*u, 20*u
	if !(excess(low) >= 0 && excess(high) <= 0) {
		return math.NaN()
	}
	for range 200 {
		middle := low + (high-low)/2
		if middle == low || middle == high {
			break
		}
		if excess(middle) > 0 {
			low = middle
		} else {
			high = middle
		}
	}
	return low
}

// legendre are the nodes above 0 and the weights of the Gauss-Legendre rule of 16 points on -1..1, exact for polynomials to the degree 31.
// Source: M. Abramowitz, I. Stegun, Handbook of Mathematical Functions, table 25.4.
var legendre = [8][2]float64{
	{0.0950125098376374402, 0.189450610455068496}, {0.281603550779258913, 0.182603415044923589},
	{0.458016777657227386, 0.169156519395002538}, {0.617876244402643748, 0.149595988816576732},
	{0.755404408355003034, 0.124628971255533872}, {0.865631202387831744, 0.0951585116824927848},
	{0.944575023073232576, 0.0622535239386478929}, {0.989400934991649933, 0.0271524594117540949},
}

// Integrate calls f at the 16 nodes of the Gauss-Legendre rule between two ends, with the weight of each: a sum of weight times value is
// the integral.
func Integrate(lower, upper float64, f func(x, weight float64)) {
	middle, half := (lower+upper)/2, (upper-lower)/2
	for _, n := range legendre {
		f(middle-half*n[0], half*n[1])
		f(middle+half*n[0], half*n[1])
	}
}
