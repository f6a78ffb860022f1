package resonance

import (
	"fmt"
	"math"
	"math/cmplx"

	"example.com/admit/service/leastsquares"
)

const (
	// leastResonanceGain is the gain of log-likelihood, G = 2N ln(rss0/rss1) over the null, from which a resonance counts as seen. Of
	// sweeps without one, 99.5 % stay below 15; a unit at 10 dB a point reaches hundreds.
	leastResonanceGain = 60.0

	// activeTolerance is how far samples may reach into what no passive unit can give before the calibration is doubted.
	activeTolerance = 0.02

	// activeOfLargest is the same for admittances and impedances, as a share of the largest sample: a reference plane that is off by a degree or
	// two gives as much.
	activeOfLargest = 0.05

	// Systematic residual, as a share of the response seen, that no crystal unit in this network leaves: at once, and where the noise is
	// known to be far below it. The latter is what an arm 27 dB down leaves from a few loaded bandwidths away. It moves R1 by about twice the
	// share, and the covariance, widened for it, grows to several percent: the answer would be about the noise, which it is not.
	misfitShare          = 0.04
	misfitShareOfKnown   = 0.006
	misfitChiSquare      = 25.0
	scatterOverNoise     = 10.0 // residual over the receiver's noise that is no longer noise, where it is also
	scatterShare         = 0.05 // this share of the response
	mostQualityFrequency = 5e13 // Q f in hertz: three times the intrinsic limit 1.6e13 of AT quartz (Vig, Quartz resonators tutorial)

	leastCapacitanceFarad = -0.5e-12 // a shunt capacitance clearly below is none, whatever the open standard was off by

	// What no crystal unit has, by orders of magnitude: units lie between an ohm and some hundred kilohm. Such values come of admittances
	// called impedances, or the reverse.
	leastResistanceOhm = 1e-2
	mostResistanceOhm  = 1e8

	// A resonance counts as inside the sweep up to this many half widths beyond its edge: as long as the sweep reaches about the half-power
	// point, R1 and L1 stand on more than a tail.
	stillInside = 1.2

	// mostSNRDecibel is the most that is claimed. No receiver resolves 1e-8 of its range; beyond, the figure is that of the arithmetic, or
	// of the digits that the samples were written with.
	mostSNRDecibel = 160.0

	// Standard deviations beyond which parameters cannot be told: of ln R1 and ln L1, and of fs in loaded bandwidths.
	mostDeviation = 0.5
)

// judge turns the best solution into an answer.
func (f *Fitter) judge(est *Estimate, found bool) {
	q := &est.Quality
	z, evident := f.evident(found)
	q.Iterations = f.iterations
	if !evident {
		z = f.robustNull()
		f.nothing(est, &z)
		return
	}
	q.Gain = f.seen.gain(z.against(), f.seen.sumOfSquares)
	bounded := f.fill(est)
	f.systematic(est)
	visible := f.describe(est)
	l := &f.best.loaded
	low, high := f.points.span()
	active, scatter := 0.0, 0.0
	if f.parts() == 2 && !f.request.ScaleUnknown && !q.Memory { // a resonator that rings gives back what it took
		active, scatter = f.active()
	}
	tolerated := f.activeTolerance() + 6*scatter
	switch {
	case f.tooFast(est, visible):
	case f.turned(est):
	case active > tolerated && f.plane.onePole():
		est.State = CalibrationMismatch
		est.Detail = fmt.Sprintf("the samples reach %.1f %% beyond what a passive unit can give: they do not belong to this calibration", 100*active)
	case f.misfit(est, visible, active > tolerated):
	case bounded && f.otherQuantity(est):
	case l.centreHz < low-stillInside*l.halfHz || l.centreHz > high+stillInside*l.halfHz:
		f.outside(est, &z, low, high)
		if !bounded || f.undetermined(est) {
			forget(est)
		}
	case f.implausible(est):
	case !bounded || f.undetermined(est):
		est.State = TooNoisy
		est.Detail = fmt.Sprintf("a resonance near %s, but its parameters cannot be told: it stands %.0f dB over the noise, too little for this sweep",
			megahertz(est.Value[ResonanceHz]), q.SNRDecibel)
	default:
		est.State = Found
		f.remark(est, visible)
	}
}

// evident says whether the best solution is a resonance at all, and returns the null that it was held against. A wild point dressed as a
// resonance is none.
func (f *Fitter) evident(found bool) (null, bool) {
	if !found {
		return null{}, false
	}
	z := f.fitNull(f.pairs, f.seen.limit)
	return z, f.seen.gain(z.against(), f.seen.sumOfSquares) >= leastResonanceGain && f.supported(&f.best.loaded)
}

// describe fills the quality of a fit and returns the response that the sweep shows: all of it, or of a resonance outside the part at the edge.
func (f *Fitter) describe(est *Estimate) (visible float64) {
	q, l := &est.Quality, &f.best.loaded
	low, high := f.points.span()
	beyond := math.Max(0, math.Max(low-l.centreHz, l.centreHz-high)) / l.halfHz
	visible = l.response / math.Sqrt(1+beyond*beyond)
	if f.memory() {
		visible = f.largestResponse()
	}
	freedom := math.Max(float64(f.seen.parts*f.seen.points-f.problem.parameters()), 1)
	q.NoiseRMS = math.Sqrt(2 * f.seen.sumOfSquares / freedom)
	noise := math.Max(q.NoiseRMS, f.request.NoiseRMS) // what is stated may be wrong either way
	q.SNRDecibel = math.Min(decibel(visible/math.Max(noise, f.floor)), mostSNRDecibel)
	q.ResidualCorrelation = f.seen.correlation
	q.ResidualOverPeak = f.seen.rms / visible
	q.WildPoints = f.seen.wild
	q.LoadedResonanceHz = f.points.referenceHz + l.centreHz
	q.LoadedBandwidthHz = 2 * l.halfHz
	if k := f.forward.column(PhaseRad); k >= 0 && !f.request.ScaleUnknown {
		q.FreePhaseRad, q.FreePhaseSigma = f.best.params[k], deviation(est, PhaseRad)
	}
	q.Memory = f.memory()
	q.DwellSeconds = f.request.Sweep.Timing.Dwell.Seconds()
	if q.Memory {
		q.DwellSeconds = f.dwell()
	}
	q.SettlingTimeConstants = q.DwellSeconds / l.timeConstant()
	return visible
}

// dwell returns the dwell of the memory in the model, with the factor on it that was fitted.
func (f *Fitter) dwell() float64 {
	if !f.request.ScaleUnknown {
		return f.forward.timing.dwell * math.Exp(f.forward.value(f.best.params[:], logStretch))
	}
	if f.shape.stretched {
		return f.shape.timing.dwell * math.Exp(f.best.params[shapeStretch])
	}
	return f.shape.timing.dwell
}

// decibel returns 20 log10 of a ratio, kept finite.
func decibel(ratio float64) float64 {
	return 20 * math.Log10(math.Max(math.Min(ratio, 1e15), 1e-15))
}

func deviation(est *Estimate, p Parameter) float64 { return math.Sqrt(est.Statistical[p][p]) }

// relativeNoise returns noise of a raw sample as a share of the range between open and short, or of the largest sample where there is none.
func (f *Fitter) relativeNoise(rms float64) float64 {
	p := &f.points
	if source := math.Hypot(p.sourceRe[0], p.sourceIm[0]); source > 0 {
		return rms * source / p.scale[0]
	}
	largest := 0.0
	for i := range p.n {
		largest = math.Max(largest, p.scale[i]*math.Hypot(p.re[i], p.im[i]))
	}
	return rms / largest
}

// misfit says whether the samples are those of something else, and why.
func (f *Fitter) misfit(est *Estimate, visible float64, active bool) bool {
	q := &est.Quality
	systematic := f.seen.systematic() / visible
	known := f.request.NoiseRMS
	switch {
	case systematic > misfitShare || q.ReducedChiSquare > misfitChiSquare && systematic > misfitShareOfKnown:
		est.Detail = fmt.Sprintf("what one crystal unit in this network leaves unexplained is systematic: %.1f %% of the response", 100*systematic)
		if active {
			est.Detail += "; and part of the samples no passive unit could give"
		}
	case known > 0 && f.seen.noise() > scatterOverNoise*known && f.seen.rms > scatterShare*visible:
		est.Detail = fmt.Sprintf("the samples scatter %s times more than the receiver's noise, %.0f %% of the response", times(f.seen.noise()/known), 100*f.seen.rms/visible)
	default:
		return false
	}
	est.State = Misfit
	return true
}

// otherQuantity says that the resistance is none of a crystal unit, wherever the resonance lies, and why that may be. No circuit is given.
func (f *Fitter) otherQuantity(est *Estimate) bool {
	r1, factor := math.Exp(est.Value[LogResistance]), math.Exp(3*deviation(est, LogResistance))
	if f.request.ScaleUnknown || r1*factor >= leastResistanceOhm && r1/factor <= mostResistanceOhm {
		return false
	}
	est.State = Misfit
	est.Detail = fmt.Sprintf("a motional resistance of %s is that of no crystal unit: the sweep may be of another quantity than stated", prefixed(r1, "Ω", 2))
	forget(est)
	return true
}

// implausible says whether the fitted circuit is none that a crystal unit can have, and why.
func (f *Fitter) implausible(est *Estimate) bool {
	c0, fs := est.Value[ShuntCapacitanceFarad], est.Value[ResonanceHz]
	quality := 2 * math.Pi * fs * fs * math.Exp(est.Value[LogInductance]-est.Value[LogResistance]) // Q fs
	switch {
	case f.best.result.Status == leastsquares.NotConverged && f.best.result.Offset > 0.1:
		est.Detail = "no circuit of one crystal unit could be fitted to the samples"
	case quality*(1-3*deviation(est, LogResistance)) > mostQualityFrequency:
		est.Detail = fmt.Sprintf("a Q of %s at %s is beyond what quartz allows", plain(quality/fs, 3), megahertz(fs))
	case c0 < leastCapacitanceFarad-5*deviation(est, ShuntCapacitanceFarad) && !f.points.impedance && !f.request.ScaleUnknown:
		est.Detail = fmt.Sprintf("the shunt capacitance comes out negative, %s", prefixed(c0, "F", 2))
	default:
		return false
	}
	est.State = Misfit
	return true
}

// undetermined says that the noise leaves the parameters open.
func (f *Fitter) undetermined(est *Estimate) bool {
	return deviation(est, LogResistance) > mostDeviation || deviation(est, LogInductance) > mostDeviation ||
		deviation(est, ResonanceHz) > mostDeviation*2*f.best.loaded.halfHz
}

// outside words a resonance of which the sweep shows the tail.
func (f *Fitter) outside(est *Estimate, z *null, low, high float64) {
	l := &f.best.loaded
	distance := math.Max(low-l.centreHz, l.centreHz-high)
	if deviation(est, ResonanceHz) > distance/2 && f.tail(est, z, f.admittance(*z)) {
		return // so far out that the expected unit tells more of the distance than the sweep
	}
	est.State = OutsideSweep
	side := "above"
	if l.centreHz < low {
		side = "below"
	}
	est.Detail = fmt.Sprintf("the sweep shows the tail of a resonance at about %s (standard uncertainty %s), %s %s its edge",
		megahertz(est.Value[ResonanceHz]), prefixed(deviation(est, ResonanceHz), "Hz", 2), prefixed(distance, "Hz", 3), side)
}

// forget takes the numbers of a circuit out of an estimate that cannot tell them.
func forget(est *Estimate) {
	est.Value, est.Fitted, est.Statistical, est.Systematic = [Parameters]float64{}, [Parameters]bool{}, Matrix{}, est.Systematic[:0]
}

// nothing says what a sweep shows in which no resonance was found.
func (f *Fitter) nothing(est *Estimate, z *null) {
	q := &est.Quality
	p := &f.points
	noise := z.seen.noise()
	q.NoiseRMS, q.WildPoints, q.ResidualCorrelation = noise, z.seen.wild, z.seen.correlation
	est.Value, est.Fitted = [Parameters]float64{}, [Parameters]bool{}
	y := f.admittance(*z)
	farad := imag(y) / (2 * math.Pi * p.referenceHz)
	est.Value[ShuntCapacitanceFarad] = farad
	// The null's own standard deviation: a constant from N samples.
	slopeY := 1.0 // |dY/dF|
	if p.impedance {
		slopeY = real(y * cmplx.Conj(y))
	} else {
		d := 1 + p.sourceAt(0)*y
		slopeY = real(d * cmplx.Conj(d))
	}
	deviation := noise / p.scale[0] * slopeY / math.Sqrt(float64(p.n))
	if f.parts() == 1 {
		deviation *= math.Pow(float64(p.n), 0.25) // at its floor a magnitude tells its square
	}
	relative := f.relativeNoise(noise)
	everything := f.relativeNoise(math.Sqrt(z.sumOfSquares / float64(z.points)))
	if f.request.ScaleUnknown {
		f.nothingUnknown(est, z)
		return
	}
	active, scatter := 0.0, 0.0
	if f.parts() == 2 {
		active, scatter = f.active()
	}
	known := f.request.NoiseRMS
	switch {
	case f.shorted():
		est.State = Shorted
		est.Detail = "the whole sweep is near a short"
		if f.parts() == 2 {
			est.Detail = fmt.Sprintf("the whole sweep is near a short: |Z| about %s", prefixed(cmplx.Abs(1/y), "Ω", 2))
		}
	case known > 0 && noise > scatterOverNoise*known && relative > activeTolerance:
		est.State = Misfit
		est.Detail = fmt.Sprintf("no resonance, and the samples scatter %s times more than the receiver's noise%s", times(noise/known), f.coarse())
	case everything > misfitShare && z.seen.correlation > 0.5:
		est.State = Misfit
		est.Detail = fmt.Sprintf("neither one resonance nor none: what a capacitance leaves unexplained is systematic, %.1f %% of the range", 100*everything)
	case active > f.activeTolerance()+6*scatter:
		est.State = CalibrationMismatch
		est.Detail = fmt.Sprintf("no resonance, and the samples reach %.1f %% beyond what a passive unit can give: they do not belong to this calibration", 100*active)
	case f.tail(est, z, y):
	case f.hidden(noise):
		est.State = TooNoisy
		est.Detail = fmt.Sprintf("the noise of a sample, %s of the range between open and short, hides the unit that is expected here", worded(100*relative, " %", 2))
	case f.empty(y, deviation):
		est.State = NoUnit
		bound := math.Abs(farad) + 3*deviation/(2*math.Pi*p.referenceHz)
		est.Detail = fmt.Sprintf("nothing in the contact head: less than %s", prefixed(raised(math.Max(bound, leastBoundFarad)), "F", 1))
	default:
		est.State = NoResonance
		est.Detail = fmt.Sprintf("no resonance between %s and %s: a capacitance of %s", plain(f.lowest()/1e6, 7), megahertz(f.highest()), prefixed(farad, "F", 3))
		if g := math.Abs(real(y)); g > 5*deviation && g > leastLoss*cmplx.Abs(y) {
			est.Detail += fmt.Sprintf(" with a conductance of %s", prefixed(real(y), "S", 3))
		}
		est.Detail += " and nothing else" + f.coarse()
	}
}

func (f *Fitter) activeTolerance() float64 {
	if f.points.sourceAt(0) == 0 {
		return activeOfLargest
	}
	return activeTolerance
}

// nothingUnknown is nothing for a network that is not known: open, short and capacitance have no meaning there.
func (f *Fitter) nothingUnknown(est *Estimate, z *null) {
	est.Value = [Parameters]float64{}
	noise := math.Sqrt(z.sumOfSquares / float64(z.points))
	if share := noise / cmplx.Abs(z.value); z.seen.correlation > 0.5 && share > misfitShare {
		est.State = Misfit
		est.Detail = fmt.Sprintf("neither one resonance nor none: what a level with a slope leaves unexplained is systematic, %.1f %% of the level", 100*share)
		return
	}
	est.State = NoResonance
	est.Detail = fmt.Sprintf("no resonance between %s and %s%s", plain(f.lowest()/1e6, 7), megahertz(f.highest()), f.coarse())
}

func (f *Fitter) lowest() float64  { low, _ := f.points.span(); return low + f.points.referenceHz }
func (f *Fitter) highest() float64 { _, high := f.points.span(); return high + f.points.referenceHz }

// hidden says that the noise would hide even the expected unit in the middle of the sweep.
func (f *Fitter) hidden(noise float64) bool {
	half := f.expectedHalfHz()
	if half == 0 || f.points.impedance {
		return false
	}
	e, p := f.request.Expected, &f.points
	source := p.sourceAt(0)
	spread := 1 + source*complex(0, 2*math.Pi*p.referenceHz*e.ShuntCapacitanceFarad)
	response := p.scale[0] / (4 * math.Pi * e.InductanceHenry * half * real(spread*cmplx.Conj(spread)))
	var energy float64
	for _, d := range p.offsetHz {
		energy += 1 / (1 + d*d/(half*half))
	}
	return 2*response*response*energy/(noise*noise) < 2*leastResonanceGain
}

// tail looks for the far tail of a resonance in a sweep that shows none: a susceptance that rises faster than a capacitance explains, as
// every reactance does between its poles. At a distance d a motional arm adds -1/(4 pi L1 d) to the susceptance, with the slope 1/(4 pi
// L1 d^2), so an expected L1 gives d. Which side it is follows from the sign of the apparent capacitance.
func (f *Fitter) tail(est *Estimate, z *null, y complex128) bool {
	const leastShare = 0.02 // of the admittance, over the sweep: more than drift does
	p := &f.points
	if p.impedance || f.parts() == 1 || z.seen.gain(z.constant, z.sumOfSquares) < leastResonanceGain {
		return false
	}
	low, high := p.span()
	at := func(v complex128) complex128 { return v / (1 - p.sourceAt(0)*v) }
	rise := imag(at(z.value+z.slope) - at(z.value-z.slope))
	rise -= imag(y) * (high - low) / p.referenceHz
	if rise < leastShare*cmplx.Abs(y) {
		return false
	}
	forget(est)
	est.State, est.Quality.LoadedResonanceHz = OutsideSweep, 0
	apparent := imag(y) / (2 * math.Pi * p.referenceHz)
	side := 0.0
	switch expected := f.request.Expected.ShuntCapacitanceFarad; {
	case apparent < 0 || expected > 0 && apparent < 0.5*expected:
		side = -1 // above its resonance an arm is inductive
	case expected > 0 && apparent > 1.5*expected:
		side = 1
	}
	where := "below or above"
	switch side {
	case -1:
		where = "below"
	case 1:
		where = "above"
	}
	est.Detail = fmt.Sprintf("no resonance in the sweep, but the tail of one %s it: the susceptance rises by %s, an apparent capacitance of %s",
		where, prefixed(rise, "S", 2), prefixed(apparent, "F", 3))
	if l1 := f.request.Expected.InductanceHenry; l1 > 0 {
		distance := math.Sqrt((high - low) / (4 * math.Pi * l1 * rise))
		est.Detail += fmt.Sprintf("; for a unit of the expected L1, about %s from the middle", prefixed(distance, "Hz", 2))
		if side != 0 {
			est.Quality.LoadedResonanceHz = p.referenceHz + side*distance
		}
	}
	return true
}
