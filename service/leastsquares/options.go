package leastsquares

// Model is what a caller fits.
type Model interface {
	// Evaluate writes the n residuals at params into residual and, unless jacobian is nil, their derivatives into
	// jacobian, column by column: jacobian[k*n+i] = d residual[i] / d params[k]. Both are overwritten in full.
	// A point at which the model does not exist is answered with a NaN or an infinity among the residuals; the solver
	// then looks for a shorter step. params must not be changed, and no slice may be kept.
	Evaluate(params, residual, jacobian []float64)
}

// Options choose how a fit is weighted and when it ends. The zero value is plain least squares with the defaults below.
type Options struct {
	// ComplexPairs says that residuals 2s and 2s+1 are the two parts of one complex sample. It matters to Huber weights
	// only, which must look at the length of the sample: weights on the parts would depend on the phase of the reference.
	ComplexPairs bool

	// HuberThreshold, when positive, is the length of a sample (in the units of the residual) beyond which it counts
	// linearly instead of squared. About 1.9 times the root mean square length of the noise of a complex sample, or 1.3
	// times the standard deviation of a real one, costs little efficiency on clean data.
	HuberThreshold float64

	// Tolerance ends the fit: no combination of the parameters is then further from the minimum, to first order, than
	// this many of its standard deviations. Default DefaultTolerance.
	Tolerance float64

	// ResidualFloor is a residual standard deviation below which differences mean nothing, for instance the rounding of
	// the data. Without noise the estimated deviation shrinks towards zero and with it the size of an acceptable step; the
	// floor stops that. Default 0.
	ResidualFloor float64

	// IterationLimit bounds the number of steps tried, accepted or not. Default DefaultIterationLimit.
	IterationLimit int

	// InitialDamping, relative to Jacobian columns of unit length, shortens the first step and so sets the first trusted
	// radius. 0 takes the whole Gauss-Newton step first, right for starts near the solution; 0.01 to 1 suits poor starts.
	InitialDamping float64

	// Scale, when given, holds one positive typical size for each parameter: the trusted region is then a ball in
	// params[k]/Scale[k]. When nil, each parameter is scaled by the largest length its Jacobian column has had so far,
	// which makes the fit independent of units.
	Scale []float64
}

// Defaults of Options.
const (
	DefaultTolerance      = 1e-4
	DefaultIterationLimit = 100
)

func (o Options) withDefaults() Options {
	if !(o.Tolerance > 0) {
		o.Tolerance = DefaultTolerance
	}
	if o.IterationLimit <= 0 {
		o.IterationLimit = DefaultIterationLimit
	}
	return o
}

// valid says whether the shapes of a problem fit together.
func (o Options) valid(residuals, parameters int) bool {
	if residuals <= 0 || parameters <= 0 || o.ComplexPairs && residuals%2 != 0 {
		return false
	}
	if o.Scale != nil && len(o.Scale) != parameters {
		return false
	}
	for _, s := range o.Scale {
		if !(s > 0) {
			return false
		}
	}
	return true
}
