package resonance

import (
	"math"
	"math/cmplx"
)

// fill writes values and statistical covariance of the best solution into the estimate.
//
// The covariance is s^2 (J'WJ)^-1, with s^2 the variance of one part of a sample: from the instrument where it is known and the residual agrees
// with it, else from the residual, sum |r|^2/(2N - p), which is the instrument's figure scaled by chi^2. Residuals that hang together
// carry fewer observations than there are points: the covariance is multiplied by the sum of their correlations at all lags,
// 1 + 2 (rho1 + rho2 + ...), the factor for a mean of correlated readings; where noise hides them from point to point, as means over
// half a loaded width and a whole one show them.
// false if the sweep does not determine some parameter at all.
func (f *Fitter) fill(est *Estimate) bool {
	m, b := f.known(), &f.best
	n := f.problem.parameters()
	freedom := math.Max(float64(f.seen.parts*f.seen.points-n), 1)
	variance := f.seen.sumOfSquares / freedom
	if b.robust {
		variance = b.result.ResidualVariance
	}
	if noise := f.request.NoiseRMS; noise > 0 {
		known := noise * noise / 2
		est.Quality.ReducedChiSquare = variance / known
		if !b.robust && math.Abs(variance/known-1) < 4*math.Sqrt(2/freedom) {
			variance = known
		}
	}
	f.seen.memory = 1
	if f.seen.significant() {
		f.seen.accumulate(f.pairs)
	}
	variance *= math.Max(f.seen.memory, f.together())
	covariance := f.workspace.Covariance()
	if f.request.ScaleUnknown {
		return f.fillShape(est, variance)
	}
	bounded := true
	for p := ResonanceHz; p < Parameters; p++ {
		i := m.column(p)
		if i < 0 {
			continue
		}
		est.Value[p], est.Fitted[p] = b.params[i], true
		for q := ResonanceHz; q < Parameters; q++ {
			k := m.column(q)
			if k < 0 {
				continue
			}
			c := covariance[i*n+k] * variance
			if math.IsInf(c, 0) || math.IsNaN(c) {
				c, bounded = 0, false
			}
			est.Statistical[p][q] = c
		}
	}
	est.Value[ResonanceHz] += f.points.referenceHz
	return bounded
}

// together returns the factor by which residuals that noise hides from point to point hang together over longer ways: the larger of what means over
// half a loaded half-power width and over a whole one show, or 1. The longer sees what a weak response a few widths away leaves.
func (f *Fitter) together() float64 {
	low, high := f.points.span()
	step := (high - low) / float64(f.points.n-1)
	factor := 1.0
	for _, width := range [...]float64{f.best.loaded.halfHz, 2 * f.best.loaded.halfHz} {
		length := int(math.Min(width/step, float64(f.points.n)/8))
		factor = math.Max(factor, f.seen.blocks(f.pairs, length))
	}
	return factor
}

// fillShape writes what a sweep in an unknown network tells: fs, and Q as the inductance that it belongs to at one ohm, L1 = 1/(4 pi half).
func (f *Fitter) fillShape(est *Estimate, variance float64) bool {
	b, n, c := &f.best, f.problem.parameters(), f.workspace.Covariance()
	est.Value[ResonanceHz] = f.points.referenceHz + b.params[shapeOffset]
	est.Value[LogInductance] = -math.Log(4*math.Pi) - b.params[shapeLogHalf]
	est.Fitted[ResonanceHz], est.Fitted[LogInductance] = true, true
	s := &est.Statistical
	s[ResonanceHz][ResonanceHz] = c[0] * variance
	s[LogInductance][LogInductance] = c[n+1] * variance
	s[ResonanceHz][LogInductance] = -c[1] * variance
	s[LogInductance][ResonanceHz] = -c[1] * variance
	if math.IsInf(s[ResonanceHz][ResonanceHz], 0) || math.IsInf(s[LogInductance][LogInductance], 0) {
		*s = Matrix{}
		return false
	}
	return true
}

// systematic fills the share of each named influence: the step that the fit would take if the terms were off by one standard uncertainty,
//
//	shift = -(J'WJ)^-1 J'W (T_changed(Y_fit) - T(Y_fit))
//
// for the fitted unit, in the linearised fit. The reference clock moves fs alone. The phase of the network keeps its share where a free phase
// was fitted (phase.go).
func (f *Fitter) systematic(est *Estimate) {
	if f.request.ScaleUnknown {
		f.unknownNetwork(est)
		f.averagingTime(est)
		f.clock(est)
		return
	}
	m := f.known()
	n := m.parameters()
	if f.problem == problem(&f.magnitude) {
		f.scratch = grown(f.scratch, f.points.n)
		f.problem.Evaluate(f.best.params[:n], f.scratch, nil) // leaves the inner residuals and slopes of the solution
	}
	if len(f.request.Contributions) > 0 {
		f.prepareCircuit()
	}
	for i := range f.request.Contributions {
		c := &f.request.Contributions[i]
		if len(c.Terms.A) != f.points.n || len(c.Terms.B) != f.points.n || len(c.Terms.C) != f.points.n {
			continue
		}
		f.changed(c.Terms.A, c.Terms.B, c.Terms.C, c.Terms.D)
		var response [Parameters]float64
		if f.problem == problem(&f.magnitude) {
			f.magnitude.project(f.shift)
			f.workspace.Response(response[:n], f.shift[:f.points.n])
		} else {
			f.workspace.Response(response[:n], f.shift)
		}
		var shift [Parameters]float64
		for p := ResonanceHz; p < Parameters; p++ {
			if k := m.column(p); k >= 0 {
				shift[p] = response[k]
			}
		}
		if est.Fitted[PhaseRad] && ofPhase(c) {
			withoutPhase(&shift, &est.Statistical)
		}
		est.Systematic = append(est.Systematic, contribution(c.Name, c.Group, shift))
	}
	f.averagingTime(est)
	f.clock(est)
}

// averagingTime adds what it does not to know over which part of its dwell a sample was averaged, where the resonator rings and no timing is
// stated. The model takes the whole dwell; a sample of the tail alone is later by up to half a dwell, in which the source has moved on by half a
// step. Anything in between is as likely: half a step over the square root of three.
func (f *Fitter) averagingTime(est *Estimate) {
	if !f.memory() || f.request.Sweep.Timing.Dwell > 0 {
		return
	}
	low, high := f.points.span()
	half := (high - low) / float64(f.points.n-1) / 2
	est.Systematic = append(est.Systematic, contribution(AveragingInfluence, "", [Parameters]float64{ResonanceHz: half / math.Sqrt(3)}))
}

// AveragingInfluence is the name of the influence of an averaging time that is not stated.
const AveragingInfluence = "averaging_time"

// clock adds the influence of the reference clock.
func (f *Fitter) clock(est *Estimate) {
	if u := f.request.ClockUncertainty; u > 0 {
		est.Systematic = append(est.Systematic, contribution(ClockInfluence, "", [Parameters]float64{ResonanceHz: u * est.Value[ResonanceHz]}))
	}
}

// known returns the model of the unit in a known network that is being fitted, itself or inside that of magnitudes.
func (f *Fitter) known() *forward {
	if f.problem == problem(&f.magnitude) {
		return &f.magnitude.settled
	}
	return &f.forward
}

// ClockInfluence is the name of the influence of the station's reference clock.
const ClockInfluence = "reference_clock"

func contribution(name, group string, shift [Parameters]float64) Contribution {
	c := Contribution{Name: name, Group: group, Shift: shift}
	for i := range shift {
		for k := range shift {
			c.Covariance[i][k] = shift[i] * shift[k]
		}
	}
	return c
}

// prepareCircuit stores at each point what the model has the unit do: F, and 1 - C F, whose ratio F/(1 - C F) is Y, or for impedances 1 and F.
// A resonator that rings does not have the admittance of its steady state, but the one that the model's sample stands for. The third
// number is the direction k/|k| by which a change of the raw sample becomes one of the residual. A free phase plays no part:
// residuals are taken before it.
func (f *Fitter) prepareCircuit() {
	p := &f.points
	f.circuit = grown(f.circuit, 6*p.n)
	residual := f.pairs
	if f.problem == problem(&f.magnitude) {
		residual = f.magnitude.residual
	}
	turn := cmplx.Rect(1, -f.known().value(f.best.params[:], PhaseRad))
	t := f.request.Terms
	for i := range p.n {
		open := complex(p.openRe[i], p.openIm[i])
		model := complex(p.rawRe[i], p.rawIm[i])*turn - open + complex(residual[2*i]/p.scale[i], residual[2*i+1]/p.scale[i])
		above, below := model, 1-complex(p.sourceRe[i], p.sourceIm[i])*model
		k := t.B[i] - t.A[i]*t.C[i]
		if p.impedance {
			above, below = 1, model
			k = t.A[i] / t.C[i]
		}
		k = cmplx.Conj(k) / complex(p.scale[i], 0)
		c := f.circuit[6*i : 6*i+6]
		c[0], c[1], c[2], c[3], c[4], c[5] = real(below), imag(below), real(above), imag(above), real(k), imag(k)
	}
}

// changed writes into f.shift by how much the residuals change when the terms become those given.
func (f *Fitter) changed(a, b, c []complex128, d float64) {
	n := f.points.n
	f.shift = grown(f.shift, 2*n)
	t := f.request.Terms
	for i := range n {
		q := f.circuit[6*i : 6*i+6]
		z, p, k := complex(q[0], q[1]), complex(q[2], q[3]), complex(q[4], q[5])
		// T' - T over one denominator, so that two nearly equal samples are not subtracted.
		above, below := t.A[i]*z+t.B[i]*p, complex(t.D, 0)*z+t.C[i]*p
		above2, below2 := a[i]*z+b[i]*p, complex(d, 0)*z+c[i]*p
		difference := above2*below - above*below2
		product := below * below2
		difference *= complex(real(product), -imag(product)) * k
		inverse := 1 / (real(product)*real(product) + imag(product)*imag(product))
		f.shift[2*i], f.shift[2*i+1] = real(difference)*inverse, imag(difference)*inverse
	}
}
