package leastsquares

import "math"

// tally is what one look at the residuals gives.
type tally struct {
	cost         float64 // what is minimised
	sumOfSquares float64 // sum r², unweighted
	outlying     int     // samples beyond the threshold
	weight       float64 // sum over residuals of the weight
	influence    float64 // sum over samples of |ψ|², ψ the residual cut to the threshold
	slope        float64 // sum over residuals of the mean derivative of ψ
}

// weigh fills the tally and the weighted residual of a point, and scales the rows of its Jacobian if it has just been evaluated.
//
// Huber's loss of a sample of length m is m² up to the threshold h and 2hm − h² beyond, with slope 2h: its weight in the normal
// equations is h/m. Only the few rows beyond the threshold are touched, so clean data pay for one pass over the residuals.
func (w *Workspace) weigh(at *point, withJacobian bool) {
	n := w.n
	at.weighted = at.residual
	h := w.options.HuberThreshold
	if !(h > 0) {
		sum := dot(at.residual, at.residual)
		at.tally = tally{cost: sum, sumOfSquares: sum, weight: float64(n), influence: sum, slope: float64(n)}
		return
	}
	parts, second := 1, 0
	if w.options.ComplexPairs {
		parts, second = 2, 1
	}
	var within, sum, beyond, lost, flat float64 // in registers, unlike the fields of a tally
	outlying := 0
	r := at.residual
	for i := 0; i+second < n; i += parts {
		square := r[i] * r[i]
		if second == 1 {
			square += r[i+1] * r[i+1]
		}
		if square <= h*h {
			within += square
			continue
		}
		if outlying == 0 {
			at.firstOutlier()
		}
		outlying++
		m := math.Sqrt(square)
		share := h / m
		sum += square
		beyond += h * (2*m - h)
		lost += float64(parts) * (1 - share)
		// Beyond the threshold ψ follows turns of a sample but not its length: a pair keeps the slope h/m in one of its two
		// directions, a real residual keeps none.
		flat += 1 + float64(second)*(1-share)
		root := math.Sqrt(share)
		at.root[i], at.root[i+second] = root, root
		at.weighted[i] *= root
		if second == 1 {
			at.weighted[i+1] *= root
		}
	}
	t := tally{
		cost: within + beyond, sumOfSquares: within + sum, outlying: outlying,
		weight: float64(n) - lost, influence: within + float64(outlying)*h*h, slope: float64(n) - flat,
	}
	at.tally = t
	if withJacobian && t.outlying > 0 {
		at.scaleRows(t.outlying*parts*8 > n)
	}
}

// scaleRows multiplies each row of the Jacobian by its root. When many rows are concerned, as at a poor start, whole columns are
// passed over; otherwise only the rows that need it.
func (at *point) scaleRows(many bool) {
	n := len(at.root)
	if many {
		for from := 0; from < len(at.jacobian); from += n {
			for i, d := range at.jacobian[from : from+n] {
				at.jacobian[from+i] = d * at.root[i]
			}
		}
		return
	}
	for row, root := range at.root {
		if root != 1 {
			for k := row; k < len(at.jacobian); k += n {
				at.jacobian[k] *= root
			}
		}
	}
}

// firstOutlier gives the point its own weighted residual, until then the residual itself, and unit weights.
func (at *point) firstOutlier() {
	at.weighted = at.scaled
	copy(at.weighted, at.residual)
	for i := range at.root {
		at.root[i] = 1
	}
}

// residualVariance returns the factor that makes a covariance out of (JᵀWJ)⁻¹.
//
// Without weights it is sum r²/(n−p). With them it is Huber's estimate (Robust Statistics, 1981, 7.6)
//
//	K² [sum ψ²/(n−p)] / ψ̄'²      K = 1 + (p/n)(1−ψ̄')/ψ̄'
//
// which belongs to (JᵀJ)⁻¹, times the mean weight, by which JᵀWJ is smaller than JᵀJ.
func (t tally) residualVariance(n, p int) float64 {
	freedom := float64(n - p)
	if freedom <= 0 || !(t.slope > 0) {
		return math.Inf(1)
	}
	total := float64(n)
	slope := t.slope / total
	k := 1 + float64(p)/total*(1-slope)/slope
	return k * k * t.influence / freedom / (slope * slope) * t.weight / total
}
