package survey

import (
	"math"

	"example.com/admit/service/leastsquares"
)

// widestMode is the half-width, as a part of the span, from which on a response is no mode but something about the background.
const widestMode = 0.25

// admit adds a batch of lobes as modes, fits all together, and keeps those for which the likelihood asks. near says that the batch is one lobe
// close to a mode that is there: then two starts are tried.
func (v *Surveyor) admit(batch []lobe, near bool) {
	next := &v.next
	next.copyFrom(&v.now)
	v.restore(next)
	for _, l := range batch {
		next.params = v.model.append(next.params, l)
	}
	next.modes = v.model.modes
	var ok bool
	if near {
		ok = v.startTwice(batch[0])
	} else {
		ok = v.fit(next, looseTolerance, looseLimit)
	}
	if !ok {
		v.refuse(len(batch))
		return
	}
	first := v.now.modes
	if len(batch) == 1 {
		gain := v.provenGain(next, first, v.now.sum)
		added := v.model.lobeOf(next.params, first)
		v.restore(&v.now)
		if gain < v.threshold || added.halfHz > widestMode*v.samples.span() || !v.inPhase(added) || near && !v.resolved(next, first) {
			v.refuse(1)
			return
		}
		next.gain[first], next.compared[first] = gain, true
		v.now.copyFrom(next)
		v.refusals = 0
		return
	}
	v.now.copyFrom(next)
	v.look()
	kept := 0
	for k := first; k < v.now.modes; {
		if v.prove(k) {
			k++
			kept++
			continue
		}
	}
	if kept > 0 {
		v.refusals = 0
		return
	}
	v.refuse(len(batch))
}

// startTwice fits next, to which a lobe close to a mode that is there has been added, and the same from another start, in which that mode is
// split, and keeps the better. Fits that look hopeless are not carried through.
func (v *Surveyor) startTwice(l lobe) bool {
	const (
		firstLimit = 8
		hopeless   = 0.25 // of the threshold
	)
	best := math.Inf(1)
	for start := range 2 {
		a := &v.next
		if start == 1 {
			if a = &v.other; !v.split(l) {
				break
			}
		}
		if !v.fit(a, looseTolerance, firstLimit) {
			continue
		}
		if a.status == leastsquares.NotConverged && v.gainOf(v.now.sum-a.sum) > hopeless*v.threshold*v.hangs() {
			v.fit(a, looseTolerance, looseLimit)
		}
		if a.sum < best {
			best = a.sum
			if start == 1 {
				v.next.copyFrom(a)
			}
		}
	}
	return !math.IsInf(best, 1)
}

// resolved says whether a solution tells the strength of a mode. Where what the model leaves hangs together it is not noise, and two modes in the
// place of one, each of any strength, may be no more than a better approximation to something else.
func (v *Surveyor) resolved(a *solution, k int) bool {
	const mostDeviation = 0.5 // of the logarithm
	if v.hangs() == 1 {
		return true
	}
	if a.fit != v.fits && !v.fit(a, looseTolerance, looseLimit) {
		return false
	}
	v.restore(a)
	m, covariance, n := &v.model, v.joint.Covariance(), len(a.params)
	at := m.at(k)
	deviation := covariance[(at+1)*n+at+1]
	if m.s.unknown {
		re, im := a.params[at+2], a.params[at+3]
		deviation = (re*re*covariance[(at+2)*n+at+2] + 2*re*im*covariance[(at+2)*n+at+3] + im*im*covariance[(at+3)*n+at+3]) /
			((re*re + im*im) * (re*re + im*im))
	}
	return deviation*v.variance/2*v.hangs() < mostDeviation*mostDeviation
}

// split writes into other the start in which the mode nearest to a lobe becomes two, on either side of where it was, each with half of its
// admittance.
func (v *Surveyor) split(l lobe) bool {
	v.restore(&v.now)
	best, least := -1, math.Inf(1)
	for k := range v.now.modes {
		if d := apart(l, v.model.lobeOf(v.now.params, k)); d < least {
			best, least = k, d
		}
	}
	if best < 0 {
		return false
	}
	m := &v.model
	there := m.lobeOf(v.now.params, best)
	const share = 0.7 // of the half-width: the two together are about as wide as the one was
	move := share * there.halfHz
	other := &v.other
	other.copyFrom(&v.now)
	at, width := m.at(best), m.perMode()
	other.params = append(other.params, other.params[at:at+width]...)
	end := len(other.params) - width
	for _, k := range [...]int{at, end} {
		if m.s.unknown {
			other.params[k+2] /= 2
			other.params[k+3] /= 2
			continue
		}
		other.params[k+1] += math.Ln2
		other.params[k+2] += math.Ln2
	}
	if l.centreHz < there.centreHz {
		move = -move
	}
	other.params[at] -= move
	other.params[end] += move
	other.modes++
	return true
}
