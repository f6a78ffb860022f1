package resonance

import (
	"fmt"
	"math"
	"time"

	"example.com/admit/service/leastsquares"
	"example.com/admit/service/sweep"
)

// settledTimeConstants is the wait at each frequency before averaging begins, in loaded time constants, from which the resonator counts as
// settled: what is left then moves fs by less than 0.001 ppm. A sample that averages over the whole dwell has the ringing in it however long
// the dwell is.
const settledTimeConstants = 7.0

// memoryTimeConstants is the wait below which the memory of the resonator is put into the model where it can be.
const memoryTimeConstants = 12.0

// wait returns the time between a change of frequency and the beginning of averaging, in seconds; an averaging that is not stated is the
// whole dwell.
func wait(t sweep.Timing) float64 {
	if t.Averaging == 0 {
		return 0
	}
	return (t.Dwell - t.Averaging).Seconds()
}

// remembers says whether the resonator's memory can be modelled at all. A source that restarts its phase leaves it undefined, and samples
// stated as admittances or impedances do not tell what the resonator was loaded with while it rang. Magnitudes are fitted settled.
func (f *Fitter) remembers() bool {
	if f.parts() == 1 || f.request.Sweep.Timing.Phase == sweep.PhaseRestarted {
		return false
	}
	return f.request.ScaleUnknown || !f.points.impedance && f.points.sourceAt(0) != 0
}

// ringsAs says that a sweep of which dwell and continuous phase are stated was too short in dwell for a resonance of that width to settle.
func (f *Fitter) ringsAs(s *solution) bool {
	t := f.request.Sweep.Timing
	return !f.memory() && t.Dwell > 0 && t.Phase == sweep.PhaseContinuous && f.remembers() &&
		wait(t) < memoryTimeConstants*s.loaded.timeConstant()
}

// rememberStated fits again with the memory of the resonator in the model if the dwell is stated and short, and the source's phase
// stated to be continuous.
func (f *Fitter) rememberStated() {
	if !f.ringsAs(&f.best) {
		return
	}
	plain := f.save()
	f.tried.n = 0
	if f.startRinging(&plain, timingOf(f.request.Sweep.Timing), false) || f.choose() && f.seen.rms < plain.seen.rms {
		if f.request.ScaleUnknown {
			f.stretch()
		}
		return
	}
	f.restore(&plain)
}

// stretch frees the timing of a shape where the likelihood asks for it; in a known network extend does that.
func (f *Fitter) stretch() {
	stated := f.save()
	next := &f.tried.solution[0]
	*next = solution{params: f.best.params}
	f.shape.stretched = true
	next.params[shapeStretch] = 0
	if f.solve(next, 0, finalIterations) && f.seen.gain(stated.seen.rms*stated.seen.rms, f.seen.rms*f.seen.rms) > leastGain {
		f.best = *next
		return
	}
	f.restore(&stated)
}

// rememberUnstated tries whether a memory explains what a settled model leaves systematic in a sweep of which no timing, or only the dwell, is
// stated: then both the dwell and the unit can be had from the samples, and that the source's phase is continuous is shown by
// them. It must explain nearly all, for much is free.
func (f *Fitter) rememberUnstated() {
	const (
		leastSystematic = 0.001 // of the response
		mostLeft        = 0.1   // of the power of what was systematic
	)
	before := f.seen.systematic()
	if !f.remembers() || f.memory() || before < leastSystematic*f.best.loaded.response || !f.lags(before) {
		return
	}
	plain := f.save()
	f.tried.n = 0
	convinced := false
	if stated := timingOf(f.request.Sweep.Timing); stated.dwell > 0 {
		convinced = f.startRinging(&plain, stated, false)
	} else {
		tau := plain.best.loaded.timeConstant()
		ratios := []float64{0.5, 0.1, 2, 0.02}
		if before < smallLag*plain.best.loaded.response {
			ratios = []float64{2}
		}
		for _, ratio := range ratios {
			if convinced = f.startRinging(&plain, timing{dwell: ratio * tau, averaging: ratio * tau}, true); convinced {
				break
			}
			// Times of other ratios count from another dwell: the choice is among those of one.
			if f.choose() && f.seen.systematic() < before/10 {
				convinced = true
				break
			}
			f.tried.n = 0
		}
	}
	if convinced || f.choose() {
		if left := f.seen.systematic(); left*left <= mostLeft*before*before {
			return
		}
	}
	f.restore(&plain)
}

// smallLag is the systematic residual, as a share of the response, up to which lag is small: of a dwell of half a time constant or more.
const smallLag = 0.015

// lags says whether what a settled model leaves looks like lag. A response y = 1/(1 + jt) that is passed at a slow rate becomes y + j s y^3 to
// first order, s positive in the direction of the sweep (the envelope equation expanded in the rate), so one number tells. While lag is
// small that explains nearly all; of a resonator that hardly had time to ring up it explains a few percent, but then s is large. A
// second mode or a filter gives next to nothing, or the wrong sign.
func (f *Fitter) lags(systematic float64) bool {
	const (
		leastPart = 0.25 // of the power of what is systematic
		largeLag  = 0.4
		somePart  = 0.02 // of that power, at a large lag
	)
	l := &f.best.loaded
	rows := 2 * f.points.n
	f.wide = grown(f.wide, rows)
	column := f.wide[:rows]
	// The amplitude of the response in the plane of the residuals: what a sample near its centre has of it.
	i := f.points.nearest(l.centreHz)
	amplitude := f.responseAt(i) * complex(1, (f.points.offsetHz[i]-l.centreHz)/l.halfHz)
	for k, d := range f.points.offsetHz {
		y := reciprocal(complex(1, (d-l.centreHz)/l.halfHz))
		v := amplitude * y * y * y * complex(0, 1)
		column[2*k], column[2*k+1] = real(v), imag(v)
	}
	e := f.beside(column, f.pairs)
	lag := e.value * f.direction()
	part := e.explained / (systematic * systematic * float64(f.seen.points))
	return lag > 0 && (part > leastPart || lag > largeLag && part > somePart)
}

// direction returns 1 for a sweep upwards and -1 for one downwards.
func (f *Fitter) direction() float64 {
	if o := f.points.offsetHz; o[len(o)-1] < o[0] {
		return -1
	}
	return 1
}

// responseAt returns what the sample at a point has of the resonance, in units of the raw sample and the direction of the residuals.
func (f *Fitter) responseAt(i int) complex128 {
	p := &f.points
	return complex(p.scale[i], 0) * (complex(p.re[i], p.im[i]) - f.background(i))
}

// saved is a fit that may be returned to.
type saved struct {
	forward forward
	shape   shape
	best    solution
	seen    residuals
}

func (f *Fitter) save() saved { return saved{f.forward, f.shape, f.best, f.seen} }

// restore brings a fit back, into the workspace as well.
func (f *Fitter) restore(s *saved) {
	f.forward, f.shape, f.best = s.forward, s.shape, s.best
	threshold := 0.0
	if s.best.robust {
		threshold = f.huberThreshold(s.seen.typical)
	}
	f.solve(&f.best, threshold, finalIterations)
}

// memory says whether the resonator's memory is in the model.
func (f *Fitter) memory() bool {
	if f.request.ScaleUnknown {
		return f.shape.memory
	}
	return f.forward.memory
}

// startRinging switches the memory on and fits from several starts. The settled fit of a fast sweep sits too late, by up to two of the bandwidths
// that it sees, and too wide, by any factor once the whole sweep is shorter than the ringing; so the starts lie earlier and narrower.
// true says that one of them convinces; the others are in f.tried.
func (f *Fitter) startRinging(plain *saved, t timing, free bool) bool {
	// What G0 and phase have taken up of the ringing they give back.
	f.forward = forward{points: &f.points, memory: true, timing: t, stretched: free}
	f.shape.memory, f.shape.timing, f.shape.stretched = true, t, free
	later := f.direction()
	starts := []struct{ back, width float64 }{{0, 1}, {0.3, 1}, {1, 1}, {0.5, 0.5}, {1, 0.2}, {1.5, 0.2}, {1, 0.1}}
	if plain.seen.systematic() < smallLag*plain.best.loaded.response {
		starts = starts[:2]
	}
	for _, from := range starts {
		s := &f.tried.solution[f.tried.n]
		*s = solution{}
		move := -later * from.back * 2 * plain.best.loaded.halfHz
		if f.request.ScaleUnknown {
			s.params = plain.best.params
			s.params[shapeLogHalf] += math.Log(from.width)
			// The area under the response stays.
			s.params[shapeAmplitude] /= from.width
			s.params[shapeAmplitude+1] /= from.width
		} else {
			plain.forward.carry(&f.forward, plain.best.params[:], s.params[:])
			s.params[LogInductance] -= math.Log(from.width)
		}
		s.params[ResonanceHz] += move
		if f.attempt() || f.explained(plain) {
			return true
		}
	}
	return false
}

// explained says that the last attempt leaves so little of what the settled model left that no other can be meant. It is then the best.
func (f *Fitter) explained(plain *saved) bool {
	const (
		share = 0.005 // of the response
		times = 5.0
	)
	if f.tried.n == 0 {
		return false
	}
	s := &f.tried.solution[f.tried.n-1]
	if s.result.Status == leastsquares.Converged && f.seen.rms < share*s.loaded.response && times*f.seen.rms < plain.seen.rms {
		f.best = *s
		return true
	}
	return false
}

// tooFast says that the resonator still rang from earlier points and that nothing in the model stands for it.
func (f *Fitter) tooFast(est *Estimate, visible float64) bool {
	t := f.request.Sweep.Timing
	q := &est.Quality
	explained := q.Memory && f.seen.systematic() <= misfitShare*visible
	tau := f.best.loaded.timeConstant()
	if t.Dwell <= 0 || explained || wait(t) >= settledTimeConstants*tau {
		return false
	}
	needed := time.Duration(settledTimeConstants * tau * 1e9).Round(time.Microsecond)
	est.State = SweptTooFast
	est.Detail = fmt.Sprintf("averaging begins %.2g loaded time constants after each change of frequency, in a dwell of %.2g; a settled sweep needs to wait %v before it averages",
		wait(t)/tau, q.SettlingTimeConstants, needed)
	switch {
	case q.Memory:
		est.Detail += ", and the timing stated does not explain what the resonator kept from earlier points"
	case t.Phase == sweep.PhaseRestarted:
		est.Detail += ", since the source restarts its phase at each step"
	case t.Phase == sweep.PhaseUnstated:
		est.Detail += ", unless the source is stated to go on with its phase at each step"
	}
	return true
}
