package leastsquares

// Status says in one word what became of a fit. Only Converged is a solution; after the next two the parameters are the best
// that were reached, after the last two they are unchanged.
type Status uint8

const (
	// Converged: a stopping test was met.
	Converged Status = iota
	// NotConverged: the iteration limit came first.
	NotConverged
	// Stalled: no step, however short, lowered the sum of squares, although the stopping test was not met. The usual cause
	// is a Jacobian that does not belong to the residuals, or an edge beyond which the model does not exist.
	Stalled
	// NotFinite: a residual or derivative at the start is NaN or infinite.
	NotFinite
	// Malformed: the shapes do not fit together: no residuals, no parameters, fewer residuals than parameters, an odd number of
	// residuals for complex samples, or a Scale of another length or not positive.
	Malformed
)

// String returns the status in words.
func (s Status) String() string {
	switch s {
	case Converged:
		return "converged"
	case NotConverged:
		return "not converged"
	case Stalled:
		return "stalled"
	case NotFinite:
		return "not finite"
	case Malformed:
		return "malformed"
	}
	return "unknown status"
}

// Reason says which test ended a fit.
type Reason uint8

const (
	// BelowTolerance: the remaining step is below Options.Tolerance of a standard deviation.
	BelowTolerance Reason = iota
	// BelowRounding: the remaining step is lost in the rounding of parameters and residuals.
	BelowRounding
	// LimitReached: Options.IterationLimit.
	LimitReached
	// NoDescent: every step was refused, until one would have changed neither parameters nor residuals beyond their rounding.
	NoDescent
	// BadStart: not finite at the start, or malformed.
	BadStart
)

// String returns the reason in words.
func (r Reason) String() string {
	switch r {
	case BelowTolerance:
		return "step below tolerance"
	case BelowRounding:
		return "step below rounding"
	case LimitReached:
		return "iteration limit"
	case NoDescent:
		return "no step lowers the sum of squares"
	case BadStart:
		return "start cannot be used"
	}
	return "unknown reason"
}

// Result is what a fit reached and how. Numbers that the data cannot give are +Inf, never NaN.
type Result struct {
	Status Status
	Reason Reason

	Iterations  int // steps accepted
	Refused     int // steps tried and refused
	Evaluations int // calls of Model.Evaluate
	Jacobians   int // those of them that asked for derivatives

	// SumOfSquares is sum r_i² of the residuals as the model gave them; Cost is what was minimised, the same without
	// Huber weights.
	SumOfSquares float64
	Cost         float64

	// DegreesOfFreedom is n - p.
	DegreesOfFreedom int

	// ResidualVariance turns the covariance for unit residual variance into the covariance of the parameters. Without
	// Huber weights it is SumOfSquares/(n-p); with them, Huber's estimate (see Workspace.ScaledCovariance).
	// It is +Inf when n = p.
	ResidualVariance float64

	// Rank is the number of combinations of parameters that the residuals determine; RankDeficient means fewer than p.
	Rank          int
	RankDeficient bool

	// SmallestPivot is the least, over the parameters, of the squared part of a Jacobian column of unit length that the
	// columns before it cannot imitate: 1 for orthogonal columns, near 0 for nearly indistinguishable parameters.
	SmallestPivot float64

	// Offset is the length of the remaining step in standard deviations, |Qᵀr|/s, at the parameters returned.
	Offset float64

	// Outlying is the number of samples beyond the Huber threshold.
	Outlying int
}
