package leastsquares

import "math"

const (
	// pivotLimit is the Cholesky pivot of the scaled normal equations below which the Jacobian itself is reduced instead.
	// Rounding changes a pivot by a few 1e-16, so above the limit at least five digits of every pivot hold.
	pivotLimit = 1e-10

	// rankTolerance is the part of a unit column, left over by the columns before it, that is taken for rounding.
	rankTolerance = 1e-12

	// nullTolerance is the share in a combination that the residuals do not see, from which on a parameter counts as
	// undetermined.
	nullTolerance = 1e-7

	// Squares between these bounds neither overflow nor lose digits in sums.
	leastSquare    = 1e-280
	greatestSquare = 1e280
)

// triangle is the reduced form of the linear problem min |r + J δ|. With C = diag(length), a permutation P given by order and
// y = Pᵀ C δ:
//
//	J C⁻¹ P = Q R      |r + J δ|² = |projected + R y|² + the part of |r|² outside the columns of J
type triangle struct {
	p         int
	r         []float64 // p by p, row-major, upper triangle
	projected []float64 // p, Qᵀr
	length    []float64 // p, lengths of the Jacobian columns, in order of the parameters
	order     []int     // p, order[j] is the parameter of column j
	rank      int
	pivot     float64   // smallest squared diagonal of R
	inverse   []float64 // p by p, R⁻¹
	work      []float64 // p
}

func (t *triangle) resize(p int) {
	t.p = p
	t.r = sized(t.r, p*p)
	t.projected = sized(t.projected, p)
	t.length = sized(t.length, p)
	t.order = sized(t.order, p)
	t.inverse = sized(t.inverse, p*p)
	t.work = sized(t.work, p)
}

// reduce brings a point's Jacobian to its triangle. It returns false, and leaves the triangle as it was, if a derivative
// is not finite.
func (w *Workspace) reduce(at *point) bool {
	gram(at.jacobian, at.weighted, w.product, w.gradient)
	if w.choleskyUsable() && w.triangle.cholesky(w.product, w.gradient) {
		return true
	}
	return w.householder(at)
}

// choleskyUsable says whether the squares gathered are finite and away from the ends of the range of float64. If not, the
// Householder way finds out whether a derivative is to blame or only its unit.
func (w *Workspace) choleskyUsable() bool {
	for k := range w.p {
		d := w.product[k*w.p+k]
		if !(d > leastSquare && d < greatestSquare) || math.IsNaN(w.gradient[k]) || math.IsInf(w.gradient[k], 0) {
			return false
		}
	}
	return true
}

// cholesky factors the normal equations after scaling them to a unit diagonal. It returns false when a pivot is too small for it.
func (t *triangle) cholesky(product, gradient []float64) bool {
	p := t.p
	for k := range p {
		t.length[k] = math.Sqrt(product[k*p+k])
		t.order[k] = k
	}
	t.rank, t.pivot = p, 1
	for k := range p {
		row := t.r[k*p : (k+1)*p]
		pivot := 1.0
		for i := range k {
			pivot -= t.r[i*p+k] * t.r[i*p+k]
		}
		if !(pivot > pivotLimit) {
			return false
		}
		t.pivot = min(t.pivot, pivot)
		root := math.Sqrt(pivot)
		row[k] = root
		for j := k + 1; j < p; j++ {
			sum := product[k*p+j] / (t.length[k] * t.length[j])
			for i := range k {
				sum -= t.r[i*p+k] * t.r[i*p+j]
			}
			row[j] = sum / root
		}
		sum := gradient[k] / t.length[k]
		for i := range k {
			sum -= t.r[i*p+k] * t.projected[i]
		}
		t.projected[k] = sum / root
	}
	return true
}

// householder reduces the Jacobian by reflections, taking at each turn the column with the most left over, so that the diagonal
// of R shows the rank. It returns false if a derivative or residual is not finite.
func (w *Workspace) householder(at *point) bool {
	n, p, t := w.n, w.p, &w.triangle
	w.reflected = sized(w.reflected, n*p)
	w.target = sized(w.target, n)
	for k := range p {
		length := norm(at.jacobian[k*n : (k+1)*n])
		if math.IsNaN(length) || math.IsInf(length, 0) {
			return false
		}
		if length == 0 {
			length = 1 // a column of zeros stays one, whatever it is divided by
		}
		w.gradient[k] = length // only scratch here: the triangle is still that of the last good point
	}
	copy(t.length, w.gradient)
	copy(w.target, at.weighted)
	for k := range p {
		t.order[k] = k
		column := w.reflected[k*n : (k+1)*n]
		for i, d := range at.jacobian[k*n : (k+1)*n] {
			column[i] = d / t.length[k]
		}
	}
	t.rank, t.pivot = 0, 1
	for k := range p {
		best, most := k, -1.0
		for j := k; j < p; j++ {
			c := w.reflected[j*n+k : (j+1)*n]
			if left := dot(c, c); left > most {
				best, most = j, left
			}
		}
		w.exchange(k, best)
		v := w.reflected[k*n+k : (k+1)*n]
		diagonal := -math.Copysign(math.Sqrt(most), v[0])
		t.r[k*p+k] = diagonal
		t.pivot = min(t.pivot, most)
		if t.rank == k && math.Abs(diagonal) > rankTolerance {
			t.rank = k + 1
		}
		if most > 0 {
			v[0] -= diagonal
			reach := -v[0] * diagonal // half the squared length of v
			for j := k + 1; j < p; j++ {
				reflect(w.reflected[j*n+k:(j+1)*n], v, reach)
			}
			reflect(w.target[k:], v, reach)
		}
		for j := k + 1; j < p; j++ {
			t.r[k*p+j] = w.reflected[j*n+k]
		}
		t.projected[k] = w.target[k]
	}
	return true
}

// exchange swaps columns k and j of the reflected Jacobian with all that belongs to them.
func (w *Workspace) exchange(k, j int) {
	if k == j {
		return
	}
	n, p, t := w.n, w.p, &w.triangle
	t.order[k], t.order[j] = t.order[j], t.order[k]
	a, b := w.reflected[k*n:(k+1)*n], w.reflected[j*n:(j+1)*n]
	for i := range a {
		a[i], b[i] = b[i], a[i]
	}
	for i := range k {
		t.r[i*p+k], t.r[i*p+j] = t.r[i*p+j], t.r[i*p+k]
	}
}

// reflect mirrors x at the plane across v; reach is |v|²/2.
func reflect(x, v []float64, reach float64) {
	f := dot(v, x) / reach
	for i, e := range v {
		x[i] -= f * e
	}
}

// solve replaces x by R⁻¹x over the rank of R; the components beyond it become 0.
func (t *triangle) solve(x []float64) {
	clear(x[t.rank:t.p])
	backSubstitute(t.r, x, t.p, t.rank)
}

// solveTransposed replaces x by R⁻ᵀx over the rank of R.
func (t *triangle) solveTransposed(x []float64) {
	forwardSubstitute(t.r, x, t.p, t.rank)
}

// backSubstitute replaces the first m components of x by those of U⁻¹x, with U the leading m by m part of a p by p upper triangle.
func backSubstitute(u, x []float64, p, m int) {
	for i := m - 1; i >= 0; i-- {
		sum := x[i]
		for j := i + 1; j < m; j++ {
			sum -= u[i*p+j] * x[j]
		}
		x[i] = sum / u[i*p+i]
	}
}

// forwardSubstitute is backSubstitute for the transpose of U.
func forwardSubstitute(u, x []float64, p, m int) {
	for i := range m {
		sum := x[i]
		for j := range i {
			sum -= u[j*p+i] * x[j]
		}
		x[i] = sum / u[i*p+i]
	}
}

// projectedLength returns |Qᵀr|, by which the residual would shrink (in the sense of right angles) with the undamped step.
func (t *triangle) projectedLength() float64 {
	return math.Sqrt(dot(t.projected[:t.rank], t.projected[:t.rank]))
}

// norm returns the length of x without overflow or underflow on the way, NaN or +Inf if a component is.
func norm(x []float64) float64 {
	var largest float64
	for _, v := range x {
		if a := math.Abs(v); a > largest || math.IsNaN(a) {
			largest = a
		}
		if math.IsNaN(largest) {
			return largest
		}
	}
	if largest == 0 || math.IsInf(largest, 0) {
		return largest
	}
	var sum float64
	for _, v := range x {
		q := v / largest
		sum += q * q
	}
	return largest * math.Sqrt(sum)
}

// covarianceTo writes (JᵀJ)⁻¹ into dst, p by p in order of the parameters, and marks parameters without a bound.
//
// When the rank is less than p, R = [R11 R12; 0 0], and the residuals do not see the combinations y = (−R11⁻¹R12 e, e). A
// parameter that takes part in one can have any value: its variance is infinite. The others have the same value whatever e is,
// so their covariance is that of e = 0, R11⁻¹R11⁻ᵀ.
func (t *triangle) covarianceTo(dst []float64, unbounded []bool) {
	p, rank := t.p, t.rank
	clear(dst)
	clear(unbounded)
	for j := range p {
		column := t.work
		clear(column)
		if j < rank {
			column[j] = 1
			backSubstitute(t.r, column, p, j+1)
			for i := range j + 1 {
				t.inverse[i*p+j] = column[i]
			}
			continue
		}
		unbounded[t.order[j]] = true
		for i := range rank {
			column[i] = t.r[i*p+j]
		}
		backSubstitute(t.r, column, p, rank)
		for i := range rank {
			if math.Abs(column[i]) > nullTolerance {
				unbounded[t.order[i]] = true
			}
		}
	}
	for i := range p {
		a := t.order[i]
		if unbounded[a] {
			dst[a*p+a] = math.Inf(1)
			continue
		}
		for j := i; j < rank; j++ {
			b := t.order[j]
			if unbounded[b] {
				continue
			}
			var sum float64
			for l := j; l < rank; l++ {
				sum += t.inverse[i*p+l] * t.inverse[j*p+l]
			}
			sum /= t.length[a] * t.length[b]
			dst[a*p+b], dst[b*p+a] = sum, sum
		}
	}
}
