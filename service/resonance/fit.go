package resonance

import (
	"math"

	"example.com/admit/service/leastsquares"
)

// Fitter fits one-window sweeps. It owns every buffer and allocates nothing once they have grown, so that one Fitter serves a stream of
// sweeps; the zero value is ready for use. A Fitter serves one goroutine at a time. Only an answer other than Found allocates, for
// its words.
type Fitter struct {
	points    points
	plane     plane
	forward   forward
	shape     shape
	magnitude magnitude
	problem   problem // the one of them that is being fitted
	workspace leastsquares.Workspace
	list      peaks
	seen      residuals // of the last fit
	best      solution
	plain     solution // of settle
	tried     attempts

	iterations int // of all fits of a sweep

	request *Request
	floor   float64 // rounding of the samples, raw units

	pairs    []float64 // residuals of the last fit as real and imaginary parts
	real     []float64 // where they are, if there is one part only
	inverted []float64 // the plane of impedance samples
	scratch  []float64
	wide     []float64 // residual and Jacobian with every parameter that there is
	circuit  []float64 // the fitted unit at each point, for the systematic influences
	shift    []float64
}

// problem is a model that can be started from a pole.
type problem interface {
	leastsquares.Model
	parameters() int
	parts() int // residuals of one sample
	start(q pole, params []float64)
	inFixture(params []float64) loaded
}

// mostParameters is the length of the longest vector of a problem.
const mostParameters = 9

// solution is one set of fitted parameters.
type solution struct {
	params [mostParameters]float64 // in the order of the problem that was fitted
	result leastsquares.Result
	loaded loaded
	robust bool // Huber weights were in use
}

const (
	// huberLength is the length, in typical lengths of the complex noise, beyond which a residual counts linearly. On clean data the
	// plain fit is kept and nothing is lost; weights come in when there are wild points.
	huberLength     = 1.9
	huberLengthReal = 1.3 // the same for residuals of one part

	// tolerance ends a fit: the remaining step in standard deviations.
	tolerance = 1e-3

	// roundingOfSamples, relative to the largest sample, is the least residual that means anything.
	roundingOfSamples = 4e-15

	startIterations = 40
	finalIterations = 60
)

// Fit fits one sweep and says what was found. est is overwritten; its slices are reused.
func (f *Fitter) Fit(req *Request, est *Estimate) {
	*est = Estimate{Systematic: est.Systematic[:0], ScaleUnknown: req.ScaleUnknown}
	f.request, f.iterations = req, 0
	if !f.admissible(est) {
		return
	}
	est.Quality.Points = req.Sweep.Points()
	f.points.prepare(req)
	f.floor = 0
	for i, s := range f.points.scale {
		f.floor = math.Max(f.floor, s*math.Hypot(f.points.rawRe[i], f.points.rawIm[i]))
	}
	f.floor *= roundingOfSamples
	f.preparePlane()
	var found bool
	switch {
	case !req.Sweep.Quantity.Complex():
		found = f.startMagnitude()
	case req.ScaleUnknown:
		f.shape.prepare(&f.points)
		f.problem = &f.shape
		if found = f.start(); found {
			f.rememberStated()
			if _, evident := f.evident(found); evident {
				f.rememberUnstated()
			}
		}
	default:
		f.forward = forward{points: &f.points}
		f.problem = &f.forward
		if found = f.start(); found {
			f.rememberStated()
			if _, evident := f.evident(found); !evident {
				break
			}
			stated := f.memory()
			f.extend(est)
			if f.rememberUnstated(); f.memory() != stated {
				f.extend(est)
			}
		}
	}
	f.judge(est, found)
}

// start looks for the resonance from an algebraic fit and, unless that convinces, from the strongest matches of a scan, and leaves the
// best solution in f.best and in the workspace. false if nothing can be fitted at all.
func (f *Fitter) start() bool {
	f.best = solution{}
	f.tried.n = 0
	if q, ok := f.plane.fit(); ok && f.attemptPole(q) {
		return true
	}
	if f.tried.n > 0 && f.ringsAs(&f.tried.solution[0]) {
		// Other starts would not help: what is missing is the memory.
		return f.choose()
	}
	f.list.n = 0
	f.plane.scan(&f.list, f.expectedHalfHz())
	z := f.robustNull()
	noise := z.seen.typical * z.seen.typical
	for i := range f.list.n {
		if 2*f.list.gain[i] > leastMatch*noise {
			f.attemptPole(f.list.pole[i])
		}
	}
	return f.choose()
}

// leastMatch is the gain below which a match of a scan, against what is left without a resonance, is not worth a fit: it would not reach
// leastResonanceGain.
const leastMatch = 25.0

// attempts are solutions from several starts.
type attempts struct {
	solution [8]solution
	seen     [8]residuals
	n        int
}

// attemptPole fits from a pole. true says that the solution convinces; it is then the best.
func (f *Fitter) attemptPole(q pole) bool {
	s := &f.tried.solution[f.tried.n]
	*s = solution{}
	f.problem.start(q, s.params[:f.problem.parameters()])
	return f.attempt()
}

// attempt fits from the parameters in the next free place of f.tried and keeps the solution there if there is one. true says that it
// convinces; it is then the best.
func (f *Fitter) attempt() bool {
	s := &f.tried.solution[f.tried.n]
	if !f.settle(s) {
		return false
	}
	if f.convincing(s) {
		f.best = *s
		return true
	}
	f.tried.seen[f.tried.n] = f.seen
	f.tried.n = min(f.tried.n+1, len(f.tried.solution)-1)
	return false
}

// choose takes the best of the solutions tried. All are measured with one ruler: squares cut off where the best of them has its noise end, so
// that wild points, which are wild to all, do not decide. Where the points so far off stand together, it is not they but the model
// that is wrong, and the plain sum of squares decides. The solution is fitted once more, to leave it in the workspace. false if
// there is none.
func (f *Fitter) choose() bool {
	t := &f.tried
	if t.n == 0 {
		return false
	}
	clip := math.Inf(1)
	for i := range t.n {
		clip = math.Min(clip, clipLength*t.seen[i].typical)
	}
	best, least := 0, math.Inf(1)
	for i := range t.n {
		if cost := f.clippedCost(t.solution[i].params[:f.problem.parameters()], clip); cost < least {
			best, least = i, cost
		}
	}
	if t.seen[best].clustered {
		for i := range t.n {
			if t.seen[i].rms < t.seen[best].rms {
				best = i
			}
		}
	}
	f.best = t.solution[best]
	threshold := 0.0
	if f.best.robust {
		threshold = f.huberThreshold(t.seen[best].typical)
	}
	return f.solve(&f.best, threshold, finalIterations)
}

// clipLength cuts off squares in the comparison of starts, in typical lengths of the noise: what lies beyond is wild for every start.
const clipLength = 3.0

// settle fits from the parameters of a solution. If residuals lie far out, it fits again with Huber weights: once these have taken the pull of
// wild points off the fit, it shows whether they stand alone. Where they do not, it is the model that is wrong in places, weights
// would only hide it, and the plain fit stands.
func (f *Fitter) settle(s *solution) bool {
	if !f.solve(s, 0, startIterations) {
		return false
	}
	if f.seen.wild == 0 && !f.seen.clustered {
		return true
	}
	if f.ringsAs(s) {
		return true // what is far off will be explained by memory
	}
	f.plain = *s
	for range 5 {
		before := f.seen.typical
		if !f.solve(s, f.huberThreshold(before), startIterations) {
			break
		}
		if f.seen.typical > 0.95*before {
			break
		}
	}
	if s.robust = f.seen.wild > 0; s.robust {
		return true
	}
	*s = f.plain
	return f.solve(s, 0, startIterations)
}

// solve runs the solver from s.params and examines the residuals. false if the result is no number.
func (f *Fitter) solve(s *solution, threshold float64, limit int) bool {
	n := f.problem.parameters()
	parts := f.problem.parts()
	s.result = f.workspace.Fit(f.problem, parts*f.points.n, s.params[:n], leastsquares.Options{
		ComplexPairs: parts == 2, HuberThreshold: threshold, Tolerance: tolerance, ResidualFloor: f.floor, IterationLimit: limit,
	})
	if s.result.Status == leastsquares.NotFinite || s.result.Status == leastsquares.Malformed {
		return false
	}
	f.iterations += s.result.Iterations + s.result.Refused
	f.pairs = f.workspace.Residual()
	if parts == 1 {
		f.real = paired(f.real, f.pairs)
		f.pairs = f.real
	}
	f.scratch = f.seen.look(f.pairs, parts, f.scratch, f.floor)
	s.loaded = f.problem.inFixture(s.params[:n])
	return true
}

// parts returns how many parts a sample of the sweep has.
func (f *Fitter) parts() int { return f.problem.parts() }

// huberThreshold returns the length from which residuals count linearly, for noise of a typical length.
func (f *Fitter) huberThreshold(typical float64) float64 {
	if f.parts() == 1 {
		return huberLengthReal * typical
	}
	return huberLength * typical
}

// paired writes values as the real parts of pairs.
func paired(dst, values []float64) []float64 {
	dst = grown(dst, 2*len(values))
	for i, v := range values {
		dst[2*i], dst[2*i+1] = v, 0
	}
	return dst
}

// convincing says that no other start can lead to anything better: what is left is white but for wild points that stand alone, and the response
// stands well above it.
func (f *Fitter) convincing(s *solution) bool {
	const clearlyAbove = 10 // 20 dB
	l := &s.loaded
	low, high := f.points.span()
	return s.result.Status == leastsquares.Converged && !f.seen.clustered && !f.seen.significant() &&
		l.response > clearlyAbove*f.seen.rms && l.centreHz > low-2*l.halfHz && l.centreHz < high+2*l.halfHz &&
		f.supported(l)
}

// clippedCost is the sum of squares with each square cut at clip^2.
func (f *Fitter) clippedCost(params []float64, clip float64) float64 {
	parts := f.parts()
	f.shift = grown(f.shift, parts*f.points.n)
	f.problem.Evaluate(params, f.shift, nil)
	var sum float64
	for i := 0; i < len(f.shift); i += parts {
		square := f.shift[i] * f.shift[i]
		if parts == 2 {
			square += f.shift[i+1] * f.shift[i+1]
		}
		sum += math.Min(square, clip*clip)
	}
	if math.IsNaN(sum) {
		return math.Inf(1)
	}
	return sum
}

// expectedHalfHz returns half the loaded bandwidth that the request leads one to expect, or 0.
func (f *Fitter) expectedHalfHz() float64 {
	e := f.request.Expected
	if f.request.ScaleUnknown || !(e.ResistanceOhm > 0 && e.InductanceHenry > 0) {
		return 0
	}
	source := complex128(0)
	if !f.points.impedance {
		source = f.points.sourceAt(0)
	}
	seen := source / (1 + source*complex(0, 2*math.Pi*f.points.referenceHz*e.ShuntCapacitanceFarad))
	return (e.ResistanceOhm + real(seen)) / (4 * math.Pi * e.InductanceHenry)
}
