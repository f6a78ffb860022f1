package survey

import "math"

const (
	// A mode of a half-width below the second part of the span whose own response explains so many thresholds, as far as the other modes cannot
	// imitate it, needs no fit without it for a proof.
	provedTimes  = 4.0
	widestProved = 0.02
)

// prove says whether the present solution needs a mode, and takes it out if not. A mode proves itself if what the others cannot imitate of its
// own response is strong; of others a fit without them is made.
func (v *Surveyor) prove(k int) bool {
	if v.now.compared[k] && v.now.gain[k] > provedTimes*v.threshold {
		return true
	}
	v.restore(&v.now)
	l := v.model.lobeOf(v.now.params, k)
	// A wide mode, or one at an edge, may be no more than another C0; so may one whose response is seen at an antiresonance only.
	s := &v.samples
	if !s.impedance && l.halfHz < widestProved*s.span() && l.centreHz > s.lowHz && l.centreHz < s.highHz {
		own := v.gainOf(v.energyOf(v.now.params, k)) / v.hangs()
		for j := range v.now.modes {
			if j != k {
				own *= share(l, v.model.lobeOf(v.now.params, j))
			}
		}
		if own > provedTimes*v.threshold {
			v.now.gain[k] = own
			return true
		}
	}
	without := &v.other
	without.copyFrom(&v.now)
	v.remove(without, k)
	if !v.fit(without, looseTolerance, looseLimit) {
		return true
	}
	v.restore(&v.now)
	turned := !v.inPhase(l) || v.hangs() > 1 && v.crowded(k) && !v.resolved(&v.now, k)
	if gain := v.provenGain(&v.now, k, without.sum); gain >= v.threshold && !turned {
		v.now.gain[k], v.now.compared[k] = gain, true
		return true
	}
	clear(without.compared[:])
	v.now.copyFrom(without)
	v.look()
	return false
}

// crowded says whether another mode stands within a half-width of a mode, or the mode beyond the sweep.
func (v *Surveyor) crowded(k int) bool {
	l := v.model.lobeOf(v.now.params, k)
	if l.centreHz < v.samples.lowHz || l.centreHz > v.samples.highHz {
		return true
	}
	for j := range v.now.modes {
		if j != k && apart(l, v.model.lobeOf(v.now.params, j)) < 0.5 {
			return true
		}
	}
	return false
}

// remove takes a mode out of a solution.
func (v *Surveyor) remove(a *solution, k int) {
	v.restore(a)
	at, width := v.model.at(k), v.model.perMode()
	a.params = append(a.params[:at], a.params[at+width:]...)
	copy(a.gain[k:], a.gain[k+1:])
	copy(a.compared[k:], a.compared[k+1:])
	a.modes--
}

// provenGain returns what a mode of a solution gains over a sum of squares without it, less what its place and width gain from noise by being
// fitted: the threshold, and the law of what is seen, are those of a mode of which only the height is not known. Where the solution leaves
// more around the mode than noise, the model is wrong there, and what a further mode gains counts in units of what is left; where residuals
// hang together, in units of what they carry together.
func (v *Surveyor) provenGain(with *solution, k int, without float64) float64 {
	v.restore(with)
	m, s := &v.model, &v.samples
	v.shift = grown(v.shift, 2*s.n)
	m.Evaluate(with.params, v.shift, nil)
	v.asked = with.fit
	v.variance = v.noise(v.shift, len(with.params))
	gain := v.gainOf(without-with.sum) - float64(m.perMode()-1)
	l := m.lobeOf(with.params, k)
	reach := math.Max(3*l.halfHz, 3*s.meanStepHz)
	sum, points := 0.0, 0
	for i, f := range s.offsetHz {
		if s.scale[i] != 0 && math.Abs(f-l.centreHz) <= reach {
			sum += v.shift[2*i]*v.shift[2*i] + v.shift[2*i+1]*v.shift[2*i+1]
			points++
		}
	}
	const beyondDoubt = 200 // thresholds: twice what residuals can hang together in correlations
	if gain < beyondDoubt*v.threshold {
		gain /= correlations(v.shift[:2*s.n])
	}
	if points > 0 {
		if chi := sum / float64(points) / v.variance; chi > 1+4/math.Sqrt(float64(points)) {
			gain /= chi
		}
	}
	return gain
}

// energyOf returns the sum of squares of a mode's own response in raw samples.
func (v *Surveyor) energyOf(params []float64, k int) float64 {
	m, s := &v.model, &v.samples
	l := m.lobeOf(params, k)
	sum := 0.0
	for i, f := range s.offsetHz {
		if s.scale[i] == 0 {
			continue
		}
		t := (f - l.centreHz) / l.halfHz
		sum += square(m.weight[i]) / (1 + t*t)
	}
	return sum * square(l.height)
}
