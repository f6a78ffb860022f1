package survey

import (
	"math"

	"example.com/admit/service/sweep"
)

// The rule by which a shunt conductance, a free phase and a factor on the timing become parameters is that of package resonance: identifiable,
// that is, the other parameters leave more than leastPart of its derivative; significant by more than leastGain, so that in a million sweeps
// without it none loses precision to it; and where much of what is left is no noise, it explains at least a part of that.
const (
	leastPart      = 0.03
	leastGain      = 25.0
	leastExplained = 1.0 / 3
)

// extend adds the optional parameter that the likelihood asks for most; false if it asks for none.
func (v *Surveyor) extend() bool {
	m := &v.model
	// The workspace holds the last fit, which need not be the present solution.
	if !v.hold(looseTolerance, looseLimit) {
		return false
	}
	best, most := optional(-1), leastGain
	for p := range optionals {
		if m.has(p) || m.s.unknown && p != timeStretch || m.s.impedance && p == freePhase || p == timeStretch && !m.memory {
			continue
		}
		if gain := v.score(p); gain > most {
			best, most = p, gain
		}
	}
	if best < 0 {
		return false
	}
	next := &v.next
	next.copyFrom(&v.now)
	v.insert(next, best)
	if !v.fit(next, looseTolerance, looseLimit) {
		return false
	}
	fall := v.now.sum - next.sum
	beyond := v.now.sum - v.variance*float64(v.samples.n-v.wild) // what was left that is no noise
	explains := beyond < v.now.sum/2 || fall > leastExplained*beyond
	left := v.joint.Residual()
	if gain := 2 * fall / v.noise(left, len(next.params)) / correlations(left); gain < leastGain || !explains {
		return false
	}
	v.now.copyFrom(next)
	v.refusals = 0
	return true
}

// insert puts an optional parameter into a solution, at nothing.
func (v *Surveyor) insert(a *solution, p optional) {
	v.restore(a)
	at := v.model.column(p)
	a.params = append(a.params, 0)
	copy(a.params[at+1:], a.params[at:])
	a.params[at] = 0
	*[optionals]*bool{&a.conductance, &a.phase, &a.stretched}[p] = true
}

// score returns what twice the log-likelihood would gain from an optional parameter to first order: with c the derivative of the residual e by
// it and c' what the columns of the model cannot imitate of c, (c'e)^2/c'c' over the variance of a part. It follows a fit of the present
// solution.
func (v *Surveyor) score(p optional) float64 {
	n := v.samples.n
	v.shift = grown(v.shift, 2*n)
	column := v.shift[:2*n]
	v.derivative(p, column)
	width := len(v.now.params)
	v.scratch = grown(v.scratch, max(width, n))
	response := v.scratch[:width]
	v.joint.Response(response, column)
	whole := 0.0
	for _, d := range column {
		whole += d * d
	}
	jacobian, residual := v.joint.Jacobian(), v.joint.Residual()
	for k, by := range response {
		if by == 0 {
			continue
		}
		for i, d := range jacobian[2*n*k : 2*n*(k+1)] {
			column[i] += by * d
		}
	}
	var left, product float64
	for i, d := range column {
		left += d * d
		product += d * residual[i]
	}
	if !(left > leastPart*leastPart*whole) {
		return 0
	}
	return v.gainOf(product * product / left)
}

// derivative writes the derivative of the residual by an optional parameter that is not in the model.
func (v *Surveyor) derivative(p optional, column []float64) {
	s, m := &v.samples, &v.model
	switch p {
	case shuntConductance:
		for i, w := range m.weight[:s.n] {
			column[2*i], column[2*i+1] = real(w), imag(w)
		}
	case freePhase:
		for i, t := range s.raw {
			column[2*i], column[2*i+1] = -s.scale[i]*imag(t), s.scale[i]*real(t)
		}
	case timeStretch:
		// By a difference: it is asked for once in a while.
		const h = 1e-5
		copy(column, v.joint.Residual())
		m.ring.set(s, 1+h)
		v.residual = grown(v.residual, 2*s.n)
		m.Evaluate(v.now.params, v.residual, nil)
		for i := range column {
			column[i] = (v.residual[i] - column[i]) / h
		}
		m.ring.set(s, 1)
		m.Evaluate(v.now.params, v.residual, nil)
	}
}

// leaveOut takes points off that are wild and stand alone: neither noise nor any mode. With against, only those that no mode could be: in a known
// network a mode adds conductance. false if there are none.
func (v *Surveyor) leaveOut(against bool) bool {
	const (
		wildLength = 6.0
		mostWild   = 0.05
	)
	s, m := &v.samples, &v.model
	limit := wildLength * wildLength * v.variance
	long := func(i int) bool {
		return i >= 0 && i < s.n && v.residual[2*i]*v.residual[2*i]+v.residual[2*i+1]*v.residual[2*i+1] > limit
	}
	wild := func(i int) bool {
		if !long(i) || long(i-1) || long(i+1) {
			return false
		}
		// conj(weight) (model - sample): the conductance that the model has too much of, but for a positive factor.
		return !against || real(m.weight[i])*v.residual[2*i]+imag(m.weight[i])*v.residual[2*i+1] > 0
	}
	found := 0
	for i := range s.n {
		if wild(i) {
			found++
		}
	}
	if found == 0 || float64(v.wild+found) > mostWild*float64(s.n) {
		return false
	}
	for i := range s.n {
		if wild(i) {
			s.scale[i] = 0
		}
	}
	v.wild += found
	return v.fit(&v.now, looseTolerance, looseLimit)
}

// finish proves every mode once more, now that all are there, drops optional parameters that have become
// superfluous, and fits to the last digit.
func (v *Surveyor) finish() {
	for k := 0; k < v.now.modes; {
		if v.prove(k) {
			k++
		}
	}
	v.restore(&v.now)
	for p := optionals - 1; p >= 0; p-- {
		if !v.model.has(p) {
			continue
		}
		next := &v.next
		next.copyFrom(&v.now)
		at := v.model.column(p)
		next.params = append(next.params[:at], next.params[at+1:]...)
		*[optionals]*bool{&next.conductance, &next.phase, &next.stretched}[p] = false
		if v.fit(next, looseTolerance, looseLimit) && v.gainOf(next.sum-v.now.sum) < leastGain/2 {
			v.now.copyFrom(next)
		}
		v.restore(&v.now)
	}
	v.hold(tightTolerance, tightLimit)
	v.look()
	v.rounds = min(v.rounds, mostRounds)
}

// remembers says whether the resonator's memory can be modelled at all: samples stated as admittances or impedances do not tell what the
// resonator was loaded with while it rang, and a source that restarts its phase leaves it undefined.
func (v *Surveyor) remembers() bool {
	s := &v.samples
	if s.dwell <= 0 || s.phase == sweep.PhaseRestarted {
		return false
	}
	return s.unknown || !s.impedance && s.source[s.n/2] != 0
}

// memoryTimeConstants is the dwell, in time constants, below which the memory of the resonator is put into the model.
const memoryTimeConstants = 12.0

// intrinsicLimit is the largest product of Q and frequency in hertz that quartz can have.
// Source: J. R. Vig, Quartz crystal resonators and oscillators, a tutorial: 1.6e13 for AT cut.
const intrinsicLimit = 1.6e13

// short says whether modes may be there that do not settle in the dwell: those found, and any as narrow as modes are looked for.
func (v *Surveyor) short() bool {
	f := v.samples.referenceHz
	narrowest := f * f / intrinsicLimit
	if _, motional := v.mainWidths(); motional > 0 {
		narrowest = math.Max(narrowest, narrowestOfMain*motional)
	}
	if w := v.request.NarrowestHz; w > 0 {
		narrowest = w
	}
	for k := range v.now.modes {
		l := v.model.lobeOf(v.now.params, k)
		narrowest = math.Min(narrowest, 2*l.halfHz)
	}
	least := memoryTimeConstants
	if v.samples.phase == sweep.PhaseUnstated {
		least = settledTimeConstants // not before there is need: whether the phase is continuous is for the samples to say
	}
	return v.samples.dwell*math.Pi*narrowest < least
}

// reconsider switches the memory on or off as the modes found ask for it.
func (v *Surveyor) reconsider() {
	if !v.remembers() || v.now.modes == 0 {
		return
	}
	v.restore(&v.now)
	short := v.short()
	if short == v.now.memory {
		return
	}
	next := &v.next
	next.copyFrom(&v.now)
	next.memory = short
	if short {
		v.model.remember()
	} else if next.stretched {
		return
	}
	if v.fit(next, looseTolerance, looseLimit) {
		v.now.copyFrom(next)
	}
}
