package survey

import (
	"math"
	"math/cmplx"
)

const (
	mostBatch   = 6 // modes added at a time
	mostRefused = 8 // places remembered that turned out to be none
	mostRounds  = 60

	// The solver's steps after which the search is given up: what is left is then no modes, but something else that modes describe badly.
	mostIterations = 800

	// A peak of the search is worth a look from this share of the threshold on: template and mode differ in width and place.
	worthALook = 0.6
	// And a fit of all modes from this share on, where the mode stands by itself: what it gains by itself is then nearly all that it can gain.
	worthAFit = 0.85

	// Of lobes added at once the weakest gains at least this part of what the strongest does.
	weakestOfBatch = 1e-3

	// Modes closer than this many half-widths of both together cannot be told by themselves.
	nearHalves = 4.0
)

// detect adds modes until nothing more stands out.
func (v *Surveyor) detect() {
	most := v.request.MostModes
	if most <= 0 {
		most = DefaultMostModes
	}
	most = min(most, MostModes)
	for v.rounds = 1; v.rounds <= mostRounds; v.rounds++ {
		v.reconsider()
		v.look()
		if v.now.modes > 0 && !v.samples.unknown && v.leaveOut(true) {
			v.look()
		}
		v.search()
		n, near := v.choose(most - v.now.modes)
		if v.iterations > mostIterations && n > 0 {
			v.more = true
			return
		}
		switch {
		case near && v.extend():
			continue // what looked like a mode beside another may have been a turn of the phase
		case n > 0:
			v.admit(v.batch[:n], near)
			continue
		case v.more || !v.extend() && !v.leaveOut(false):
			return
		}
	}
}

// search scans what the present solution leaves.
func (v *Surveyor) search() {
	v.narrowest, v.widest = v.bank()
	rate := v.request.FalseAlarmRate
	if !(rate > 0) {
		rate = DefaultFalseAlarmRate
	}
	if v.threshold == 0 {
		v.threshold = 2 * math.Log(float64(v.samples.n)/rate)
	}
	v.scanner.scan(&v.model, v.residual, v.narrowest, v.widest, v.variance, worthALook*v.threshold)
	v.tests = v.scanner.tests
	v.threshold = 2 * math.Log(float64(v.tests)/rate)
}

// choose looks at the peaks, strongest first, each by itself and with those before it taken off, and puts those that can be added at once into
// the batch: one if it stands near a mode that is there, else all that stand by themselves.
func (v *Surveyor) choose(room int) (n int, near bool) {
	v.fillLeft()
	floor := roundingOfSamples * v.samples.largest
	const stillThere = 0.7 // of what is worth a look, with the stronger peaks taken off
	least := stillThere * worthALook * v.threshold * v.variance / 2
	strongest := 0.0
	for i := range v.scanner.n {
		p := v.scanner.list[i]
		if p.gain < worthALook*v.threshold || v.wasRefused(p) {
			continue
		}
		l, fall, ok := v.local.fit(&v.small, p, least, floor)
		if !ok {
			continue
		}
		gain := v.gainOf(fall)
		if n == 0 {
			strongest = gain
		}
		if !v.inPhase(l) {
			continue
		}
		beside := v.beside(l, n)
		if gain < weakestOfBatch*strongest {
			continue // perhaps what the fits of the stronger ones were off by; the next round tells
		}
		if gain < worthALook*v.threshold || !beside && gain < worthAFit*v.threshold || beside && n > 0 {
			continue
		}
		if n >= room {
			v.more = true
			return 0, false
		}
		v.batch[n], v.from[n] = l, p
		n++
		if beside {
			return n, true
		}
		if v.now.modes == 0 || n == mostBatch || n == room {
			break
		}
		v.local.subtract(l)
	}
	return n, false
}

// mostTurned is how far the response of a mode may be turned against that of the strongest in an unknown network. The modes of one unit reach the
// receiver by the same way; what is turned further is something that the model lacks.
const mostTurned = math.Pi / 3

// inPhase says whether a lobe may be a mode of the same unit as those found. In a known network its height is a conductance by itself.
func (v *Surveyor) inPhase(l lobe) bool {
	k := v.strongest()
	if !v.samples.unknown || k < 0 {
		return true
	}
	first := v.model.lobeOf(v.now.params, k).height
	return math.Abs(cmplx.Phase(l.height/first)) <= mostTurned
}

// fillLeft copies what the present solution lacks for the fits of single lobes.
func (v *Surveyor) fillLeft() {
	v.local.left = grown(v.local.left, v.samples.n)
	for i := range v.local.left {
		v.local.left[i] = complex(-v.residual[2*i], -v.residual[2*i+1])
	}
}

// beside says whether a lobe stands near a mode of the present solution or one of the first n of the batch.
func (v *Surveyor) beside(l lobe, n int) bool {
	for k := range v.now.modes {
		if apart(l, v.model.lobeOf(v.now.params, k)) < nearHalves {
			return true
		}
	}
	for _, b := range v.batch[:n] {
		if apart(l, b) < nearHalves {
			return true
		}
	}
	return false
}

// apart returns the distance of two lobes over the sum of their half-widths.
func apart(a, b lobe) float64 { return math.Abs(a.centreHz-b.centreHz) / (a.halfHz + b.halfHz) }

// share returns the part of the energy of a lobe that another, its place, width and height being free, cannot imitate (observe.go).
func share(l, other lobe) float64 {
	d, h := l.centreHz-other.centreHz, other.halfHz
	near, far := d*d+(l.halfHz-h)*(l.halfHz-h), d*d+(l.halfHz+h)*(l.halfHz+h)
	return near / far * near / far
}

func (v *Surveyor) wasRefused(p peak) bool {
	for _, q := range v.refused[:v.refusals] {
		if math.Abs(p.centreHz-q.centreHz) < math.Max(p.halfHz, q.halfHz)+v.samples.meanStepHz/2 {
			return true
		}
	}
	return v.refusals == mostRefused
}

// refuse remembers where the first n of the batch were found, until a mode is added.
func (v *Surveyor) refuse(n int) {
	for _, p := range v.from[:n] {
		if v.refusals < mostRefused {
			v.refused[v.refusals] = p
			v.refusals++
		}
	}
}
