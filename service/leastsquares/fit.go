package leastsquares

import "math"

const (
	epsilon = 0x1p-52

	// unresolved is the relative change of a sum of squares below which its rounding decides whether it went up or down.
	unresolved = 1e-12
)

// Fit looks for the params that minimise the sum of squares of the residuals of the model, from those given, and leaves them in
// params. residuals is n. The covariance and the residuals at the solution are then read from the workspace.
//
// Cost: a pass over the Jacobian of n p²/2 multiplications for each accepted step. Derivatives are asked for together with the
// residuals as long as steps are accepted, and only residuals after a refusal.
func (w *Workspace) Fit(model Model, residuals int, params []float64, options Options) Result {
	w.options = options.withDefaults()
	if !w.options.valid(residuals, len(params)) || residuals < len(params) {
		return Result{
			Status: Malformed, Reason: BadStart,
			SumOfSquares: math.Inf(1), Cost: math.Inf(1), ResidualVariance: math.Inf(1), Offset: math.Inf(1),
		}
	}
	w.resize(residuals, len(params))
	copy(w.now.params, params)

	var res Result
	w.evaluate(model, &w.now, true, &res)
	if !finite(w.now.cost) || !w.reduce(&w.now) {
		w.withoutCovariance()
		res.Status, res.Reason = NotFinite, BadStart
		res.SumOfSquares, res.Cost = math.Inf(1), math.Inf(1)
		res.ResidualVariance, res.Offset = math.Inf(1), math.Inf(1)
		res.DegreesOfFreedom = residuals - len(params)
		return res
	}
	w.openTrust()
	w.descend(model, &res)

	copy(params, w.now.params)
	w.triangle.covarianceTo(w.covariance, w.unbounded)
	res.SumOfSquares, res.Cost, res.Outlying = w.now.sumOfSquares, w.now.cost, w.now.outlying
	res.DegreesOfFreedom = w.n - w.p
	res.ResidualVariance = w.now.residualVariance(w.n, w.p)
	res.Rank, res.RankDeficient = w.rank, w.rank < w.p
	res.SmallestPivot = w.pivot
	return res
}

// descend takes steps until a test ends the fit, and notes which.
func (w *Workspace) descend(model Model, res *Result) {
	withJacobian := true
	before := math.Inf(1) // length of the remaining step before one that the cost could not judge
	for {
		length := w.projectedLength()
		deviation := w.deviation()
		res.Offset = offset(length, deviation)
		rounding := w.rounding()
		switch {
		case length <= w.options.Tolerance*deviation:
			res.Status, res.Reason = Converged, BelowTolerance
			return
		case length <= 2*rounding, length > 0.9*before:
			res.Status, res.Reason = Converged, BelowRounding
			return
		}
		// Where the whole reduction still to be had is in the rounding of the cost, the cost cannot judge a step; the gradient,
		// which is not squared, still points the right way, and is followed as long as each step shortens what is left.
		blind := length*length <= unresolved*w.now.cost
		before = math.Inf(1)
		if blind {
			before = length
		}
		near := blind || length <= 64*rounding // a model rounds its residuals several times
		for {
			predicted, slope := w.step()
			if math.Sqrt(w.linear) <= max(4*rounding, epsilon/4*math.Sqrt(w.now.cost)) {
				res.Status, res.Reason = Stalled, NoDescent
				if near {
					res.Status, res.Reason = Converged, BelowRounding
				}
				return
			}
			w.propose()
			if res.Iterations+res.Refused >= w.options.IterationLimit {
				res.Status, res.Reason = NotConverged, LimitReached
				return
			}
			w.evaluate(model, &w.next, withJacobian, res)
			actual := math.Inf(-1)
			if finite(w.next.cost) {
				actual = w.now.cost - w.next.cost
			}
			accepted := actual > 1e-4*predicted || blind && actual > -10*unresolved*w.now.cost
			if accepted && !withJacobian {
				w.evaluate(model, &w.next, true, res)
			}
			if accepted && !w.reduce(&w.next) {
				accepted, actual = false, math.Inf(-1)
			}
			if !blind || !accepted {
				w.trust.follow(actual, predicted, slope)
			}
			withJacobian = accepted
			if accepted {
				break
			}
			res.Refused++
			if near {
				res.Status, res.Reason = Converged, BelowRounding
				return
			}
		}
		res.Iterations++
		w.now, w.next = w.next, w.now
		w.rescale()
	}
}

// evaluate asks the model at a point and weighs the answer.
func (w *Workspace) evaluate(model Model, at *point, withJacobian bool, res *Result) {
	res.Evaluations++
	var jacobian []float64
	if withJacobian {
		res.Jacobians++
		jacobian = at.jacobian
	}
	model.Evaluate(at.params, at.residual, jacobian)
	w.weigh(at, withJacobian)
}

// propose puts the point at the end of the step into next.
func (w *Workspace) propose() {
	for j, k := range w.order {
		w.next.params[k] = w.now.params[k] + w.y[j]/w.length[k]
	}
}

// deviation returns the residual standard deviation that steps are measured against.
func (w *Workspace) deviation() float64 {
	estimated := math.Sqrt(w.now.cost / float64(max(w.n-w.p, 1)))
	return max(estimated, w.options.ResidualFloor)
}

// rounding returns the change of the residuals, as a length, when every parameter changes by half a unit in its last place.
// No step can be found to better than that.
func (w *Workspace) rounding() float64 {
	var sum float64
	for k, x := range w.now.params {
		q := x * w.length[k]
		sum += q * q
	}
	return epsilon / 2 * math.Sqrt(sum)
}

// offset returns length/deviation, with nothing left to do counting as 0 even where the deviation is 0.
func offset(length, deviation float64) float64 {
	if length == 0 {
		return 0
	}
	return length / deviation
}

// withoutCovariance says of every parameter that nothing is known.
func (w *Workspace) withoutCovariance() {
	clear(w.covariance)
	for k := range w.p {
		w.covariance[k*w.p+k] = math.Inf(1)
		w.unbounded[k] = true
	}
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }
