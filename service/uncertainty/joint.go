package uncertainty

import (
	"math"
	"slices"
)

// jointPoints is how many points of the unit cube JointConformance looks at. Its error is about 1/points, far below what an
// uncertainty is known to.
const jointPoints = 4093

// JointConformance returns the probability that every one of n jointly normal quantities lies within its own limits, given estimates, their
// n by n covariance (row by row) and limits, which may be infinite. It is what the extreme of several readings conforms with: the highest
// of them is below a limit exactly when all are.
//
// Readings of one instrument share its errors, so that the product of single probabilities is too low, and the smallest of them too high.
// The integral is taken along the Cholesky factor, one conditional probability after the other, over a fixed lattice: the same input
// gives the same output, to about 1e-4. A variance of 0 is an exact value.
// Source: A. Genz, Numerical computation of multivariate normal probabilities, J. Comput. Graph. Stat. 1 (1992) 141.
func JointConformance(values, covariance, lower, upper []float64) float64 {
	n := len(values)
	order := make([]int, n)
	for i := range order {
		order[i] = i
	}
	// The narrowest first: the spread of what is averaged is least then.
	single := func(i int) float64 {
		return Conformance(values[i], math.Sqrt(math.Max(0, covariance[i*n+i])), lower[i], upper[i])
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch pa, pb := single(a), single(b); {
		case pa < pb:
			return -1
		case pa > pb:
			return 1
		}
		return 0
	})
	switch n {
	case 0:
		return 1
	case 1:
		return single(0)
	}
	j := joint{n: n, factor: cholesky(covariance, order), low: make([]float64, n), high: make([]float64, n), y: make([]float64, n)}
	for k, i := range order {
		j.low[k], j.high[k] = lower[i]-values[i], upper[i]-values[i]
	}
	var sum float64
	steps := irrationals(n)
	for point := 1; point <= jointPoints; point++ {
		sum += j.at(func(k int) float64 {
			_, x := math.Modf(float64(point) * steps[k])
			return math.Abs(2*x - 1) // folded: the integrand becomes periodic, and the lattice exact to a higher order
		})
	}
	return sum / jointPoints
}

// joint is one integral under way. Deviations from the estimates are factor times y with independent standard normal y.
type joint struct {
	n         int
	factor    []float64
	low, high []float64
	y         []float64
}

// at returns the product of conditional probabilities along one point of the cube.
func (j *joint) at(u func(k int) float64) float64 {
	product := 1.0
	for k := range j.n {
		var shift float64
		for i := range k {
			shift += j.factor[k*j.n+i] * j.y[i]
		}
		own := j.factor[k*j.n+k]
		if own == 0 { // given the others this one is exact
			if shift < j.low[k] || shift > j.high[k] {
				return 0
			}
			j.y[k] = 0
			continue
		}
		below := NormalProbability((j.low[k] - shift) / own)
		inside := Conformance(shift, own, j.low[k], j.high[k])
		if product *= inside; product == 0 {
			return 0
		}
		y := NormalQuantile(math.Min(1, below+u(k)*inside))
		j.y[k] = math.Max(-40, math.Min(40, y))
	}
	return product
}

// cholesky returns the lower triangular factor of a covariance in the order given; a pivot that is nothing but rounding becomes 0.
func cholesky(covariance []float64, order []int) []float64 {
	n := len(order)
	l := make([]float64, n*n)
	for r, i := range order {
		for c := range r {
			if l[c*n+c] == 0 {
				continue
			}
			sum := covariance[i*n+order[c]]
			for k := range c {
				sum -= l[r*n+k] * l[c*n+k]
			}
			l[r*n+c] = sum / l[c*n+c]
		}
		pivot := covariance[i*n+i]
		for k := range r {
			pivot -= l[r*n+k] * l[r*n+k]
		}
		if pivot > 1e-12*covariance[i*n+i] {
			l[r*n+r] = math.Sqrt(pivot)
		}
	}
	return l
}

// irrationals returns the roots of the first n primes, the steps of a Richtmyer lattice.
func irrationals(n int) []float64 {
	steps := make([]float64, 0, n)
	for p := 2; len(steps) < n; p++ {
		prime := true
		for d := 2; d*d <= p && prime; d++ {
			prime = p%d != 0
		}
		if prime {
			steps = append(steps, math.Sqrt(float64(p)))
		}
	}
	return steps
}
