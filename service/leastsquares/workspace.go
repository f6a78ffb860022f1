package leastsquares

// Workspace holds every buffer of a fit, and afterwards what Fit left in them. The zero value is ready for use. It must not be
// shared by goroutines, nor copied.
type Workspace struct {
	n, p    int
	options Options
	now     point // the best point so far
	next    point // the point being tried
	triangle
	trust

	product    []float64 // p by p, JᵀJ, upper triangle
	gradient   []float64 // p, Jᵀr
	reflected  []float64 // n by p, the Jacobian under Householder reflections; sized when first needed
	target     []float64 // n, the residual under the same reflections
	covariance []float64 // p by p, for unit residual variance
	unbounded  []bool    // p, parameters that the residuals leave undetermined
}

// point is a place in parameter space with what the model said there.
type point struct {
	params   []float64 // p
	residual []float64 // n, as the model gave it
	jacobian []float64 // n by p column-major, rows scaled by root where weights are in use
	weighted []float64 // n, residual scaled by root; the residual itself where no sample is beyond the threshold
	scaled   []float64 // n, storage of weighted
	root     []float64 // n, square roots of the weights; meaningful only when outlying > 0
	tally
}

// resize gives every buffer the length that the problem needs; capacity only grows.
func (w *Workspace) resize(n, p int) {
	w.n, w.p = n, p
	for _, at := range []*point{&w.now, &w.next} {
		at.params = sized(at.params, p)
		at.residual = sized(at.residual, n)
		at.jacobian = sized(at.jacobian, n*p)
		at.scaled = sized(at.scaled, n)
		at.root = sized(at.root, n)
	}
	w.product = sized(w.product, p*p)
	w.gradient = sized(w.gradient, p)
	w.covariance = sized(w.covariance, p*p)
	w.unbounded = sized(w.unbounded, p)
	w.triangle.resize(p)
	w.trust.resize(p)
}

// sized returns a slice of the given length, on the storage of s where that is large enough. The content is left over from before.
func sized[T any](s []T, length int) []T {
	if cap(s) < length {
		return make([]T, length)
	}
	return s[:length]
}

// Residual returns the n residuals at the parameters that Fit returned, unweighted. The slice belongs to the workspace and holds
// until the next Fit.
func (w *Workspace) Residual() []float64 { return w.now.residual }

// Jacobian returns the derivatives at the parameters that Fit returned, column-major n by p. Rows of samples beyond the Huber
// threshold are scaled by the square root of their weight. The slice belongs to the workspace and holds until the next Fit.
func (w *Workspace) Jacobian() []float64 { return w.now.jacobian }

// Covariance returns (JᵀWJ)⁻¹, the covariance of the parameters for residuals of unit variance, p by p and row-major, at the
// parameters that Fit returned; W is the identity without Huber weights. A parameter that the residuals do not determine has the
// variance +Inf and no covariance with others. The slice belongs to the workspace and holds until the next Fit.
func (w *Workspace) Covariance() []float64 { return w.covariance }

// ScaledCovariance writes the covariance of the parameters, residualVariance (JᵀWJ)⁻¹, into dst, p by p and row-major.
// residualVariance is Result.ResidualVariance, or a variance known from elsewhere.
func (w *Workspace) ScaledCovariance(dst []float64, residualVariance float64) {
	for i, c := range w.covariance {
		// A variance may be infinite and a covariance zero: their product is the covariance, not NaN.
		if c == 0 {
			dst[i] = 0
			continue
		}
		dst[i] = c * residualVariance
	}
}

// Response writes into dst (length p) how the solution moves, to first order, when shift (length n) is added to the residuals:
//
//	δx = −(JᵀWJ)⁻¹ JᵀW shift
//
// With shift the derivative of the residuals by some constant of the model, dst is the derivative of the solution by that
// constant: the sensitivity coefficient of JCGM 100, 5.1.3. Left out are the term with second derivatives, of the size of the
// residual, and that Huber weights follow the shift, of the size of the share of samples beyond the threshold. Undetermined parameters get 0. It must follow a Fit that was not Malformed or NotFinite.
func (w *Workspace) Response(dst, shift []float64) {
	t := &w.triangle
	work := t.work
	for j, k := range t.order {
		column := w.now.jacobian[k*w.n : (k+1)*w.n]
		var sum float64
		if w.now.outlying == 0 {
			sum = dot(column, shift)
		} else {
			for i, d := range column {
				sum += d * w.now.root[i] * shift[i]
			}
		}
		work[j] = sum / t.length[k]
	}
	t.solveTransposed(work)
	t.solve(work)
	for j, k := range t.order {
		dst[k] = 0
		if j < t.rank && !w.unbounded[k] {
			dst[k] = -work[j] / t.length[k]
		}
	}
}
