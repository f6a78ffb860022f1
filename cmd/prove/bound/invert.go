package bound

import "math"

// inverted returns the inverse of a symmetric positive definite matrix of p rows, by Cholesky decomposition after scaling its diagonal to one.
// false if a pivot says that it is singular to working precision.
func inverted(a []float64, p int) ([]float64, bool) {
	const leastPivot = 1e-14
	scale := make([]float64, p)
	for k := range p {
		if !(a[k*p+k] > 0) {
			return nil, false
		}
		scale[k] = 1 / math.Sqrt(a[k*p+k])
	}
	lower := make([]float64, p*p)
	for k := range p {
		for l := range k + 1 {
			sum := a[k*p+l] * scale[k] * scale[l]
			for i := range l {
				sum -= lower[k*p+i] * lower[l*p+i]
			}
			if k > l {
				lower[k*p+l] = sum / lower[l*p+l]
				continue
			}
			if !(sum > leastPivot) {
				return nil, false
			}
			lower[k*p+k] = math.Sqrt(sum)
		}
	}
	inverse := make([]float64, p*p)
	column := make([]float64, p)
	for c := range p {
		for k := range p { // L y = e
			column[k] = 0
			if k == c {
				column[k] = 1
			}
			for i := range k {
				column[k] -= lower[k*p+i] * column[i]
			}
			column[k] /= lower[k*p+k]
		}
		for k := p - 1; k >= 0; k-- { // L' x = y
			for i := k + 1; i < p; i++ {
				column[k] -= lower[i*p+k] * column[i]
			}
			column[k] /= lower[k*p+k]
		}
		for k := range p {
			inverse[k*p+c] = column[k] * scale[k] * scale[c]
		}
	}
	return inverse, true
}
