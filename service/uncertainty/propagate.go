package uncertainty

import "math"

// Propagate writes U_y = J U_x Jᵀ into dst.
//
// jacobian is m by n, row by row: jacobian[i*n+j] = ∂y_i/∂x_j. covariance is n by n, dst m by m; dst must not overlap either.
// covariance is taken as symmetric. A derivative of 0 ends the matter, even where the variance is infinite: a quantity that
// does not depend on an unknown one is known. Where two derivatives meet infinite variances, dst holds +Inf on its diagonal and
// 0 beside it.
// Source: JCGM 102:2011, 6.2.1.3; for m = 1 JCGM 100:2008, equation (13).
func Propagate(dst, jacobian, covariance []float64, m, n int) {
	for i := range m {
		for k := i; k < m; k++ {
			sum := bilinear(jacobian[i*n:(i+1)*n], covariance, jacobian[k*n:(k+1)*n])
			if k != i && (math.IsInf(sum, 0) || math.IsNaN(sum)) {
				sum = 0
			}
			dst[i*m+k], dst[k*m+i] = sum, sum
		}
	}
}

// Variance returns gᵀ U g, the variance of a scalar with the gradient g by quantities of the covariance U.
func Variance(gradient, covariance []float64) float64 {
	return bilinear(gradient, covariance, gradient)
}

// bilinear returns aᵀ U b, leaving out zero derivatives. For a = b it is not negative and not NaN.
func bilinear(a, covariance, b []float64) float64 {
	n := len(a)
	var total float64
	for j, aj := range a {
		if aj == 0 {
			continue
		}
		var sum float64
		for l, bl := range b {
			if u := covariance[j*n+l]; bl != 0 && u != 0 {
				sum += u * bl
			}
		}
		total += aj * sum
	}
	// Rounding can leave a variance that cancels a little below zero.
	if total < 0 && &a[0] == &b[0] {
		return 0
	}
	return total
}

// leastStep is the least relative step of Gradient: below it the rounding of f, 1e-16 of its value, would show in the quotient.
const leastStep = 1e-9

// Gradient writes the derivatives of f at the point at into dst by central differences,
//
//	∂f/∂x_k = [f(x + h_k e_k) − f(x − h_k e_k)] / 2h_k
//
// with h_k = steps[k], which should be the standard uncertainty of x_k: u_k ∂f/∂x_k is then half the change of f over the range
// in which x_k lies, which is what JCGM 100, 5.1.3 note 2 asks for where f is not straight over it, and no longer a derivative in
// a point. f is the exact function, evaluated twice for each parameter.
//
// f returns false where it has no value; then, or when a value is not finite, Gradient returns false and dst is not to be used: an
// uncertainty that reaches beyond the edge of a function's domain has no first-order form. A step of 0 means that x_k is exact
// and gives 0. Steps below 1e-9 of x_k are lengthened to that. at is changed during the call and restored; f must not keep it.
func Gradient(f func(at []float64) (float64, bool), at, steps, dst []float64) bool {
	for k, x := range at {
		h := math.Abs(steps[k])
		if h == 0 {
			dst[k] = 0
			continue
		}
		h = max(h, leastStep*math.Abs(x))
		above, below := x+h, x-h
		at[k] = above
		high, highKnown := f(at)
		at[k] = below
		low, lowKnown := f(at)
		at[k] = x
		dst[k] = (high - low) / (above - below)
		if !highKnown || !lowKnown || math.IsNaN(dst[k]) || math.IsInf(dst[k], 0) {
			return false
		}
	}
	return true
}

// Correlation returns the correlation coefficient of quantities i and j of an n by n covariance, 0 where one of them is exact or
// unknown. Source: JCGM 100:2008, equation (14).
func Correlation(covariance []float64, n, i, j int) float64 {
	product := math.Sqrt(covariance[i*n+i]) * math.Sqrt(covariance[j*n+j])
	if product == 0 || math.IsInf(product, 0) {
		return 0
	}
	return max(-1, min(1, covariance[i*n+j]/product))
}

// MeanCovariance writes the arithmetic means of simultaneous readings into mean (length n) and the covariance of those means into
// covariance (n by n), and returns its degrees of freedom, one less than the number of readings. readings[q] are all readings of
// quantity q; each quantity has the same number. With fewer than two readings the variances are +Inf.
// Source: JCGM 100:2008, equations (3), (5) and (17).
func MeanCovariance(mean, covariance []float64, readings [][]float64) (freedom float64) {
	n := len(readings)
	for q, values := range readings {
		mean[q] = average(values)
	}
	clear(covariance)
	for i, a := range readings {
		count := float64(len(a))
		if len(a) < 2 {
			covariance[i*n+i] = math.Inf(1)
			continue
		}
		for j := i; j < n; j++ {
			var sum float64
			for k, b := range readings[j] {
				sum += (a[k] - mean[i]) * (b - mean[j])
			}
			sum /= count * (count - 1)
			covariance[i*n+j], covariance[j*n+i] = sum, sum
		}
		freedom = count - 1
	}
	return freedom
}

func average(values []float64) float64 {
	if len(values) == 0 {
		return 0
	}
	var sum float64
	for _, v := range values {
		sum += v
	}
	return sum / float64(len(values))
}

// RootSumSquares returns √(Σ u²), the combination of independent standard uncertainties, without overflow on the way.
// Source: JCGM 100:2008, equation (10) with sensitivity coefficients inside u.
func RootSumSquares(u ...float64) float64 {
	var total float64
	for _, v := range u {
		total = math.Hypot(total, v)
	}
	return total
}
