package survey

import "math"

// model is the forward model of all modes together, a leastsquares.Model: residuals 2i and 2i+1 are the parts of (model - sample) at point i, in
// units of the raw sample.
//
// Parameters, network known: C0, then G0, a free phase and the logarithm of a factor on all times where they are switched on, then for each
// mode fs as the offset from samples.referenceHz, ln R and ln L. Network unknown: see shape.go.
type model struct {
	s           *samples
	modes       int
	conductance bool // G0 is a parameter
	phase       bool // so is a free phase of all samples
	stretched   bool // so is the logarithm of a factor on all times
	memory      bool // the resonator rings
	neighbour   *arm // a mode beyond the sweep that is known: part of the unit, not of the parameters

	ring    ring
	coupled coupled
	free    [MostModes]free

	arms   [MostModes][]complex128 // 1/Z of each mode at each point; of an unknown network its response of unit height
	shunt  []complex128            // all else that is parallel, then Y
	weight []complex128            // raw sample per siemens of a small admittance beside Y, k/|k| left out; 1 where the network is unknown
	rung   []complex128            // what the free oscillations add to F
}

// arm is one motional arm.
type arm struct{ offsetHz, resistance, inductance float64 }

// optional parameters of the model, in their order after C0 or the background.
type optional int

const (
	shuntConductance optional = iota
	freePhase
	timeStretch
	optionals
)

func (m *model) has(p optional) bool {
	return [optionals]bool{m.conductance, m.phase, m.stretched}[p]
}

// base returns how many parameters every model has that are not those of modes.
func (m *model) base() int {
	if m.s.unknown {
		return shapeBase
	}
	return 1
}

// column returns the place of an optional parameter, or where it would stand.
func (m *model) column(p optional) int {
	k := m.base()
	for q := range p {
		if m.has(q) {
			k++
		}
	}
	return k
}

// value returns an optional parameter, 0 where it is not in the model.
func (m *model) value(params []float64, p optional) float64 {
	if !m.has(p) {
		return 0
	}
	return params[m.column(p)]
}

// perMode returns how many parameters a mode has.
func (m *model) perMode() int {
	if m.s.unknown {
		return shapePerMode
	}
	return int(perMode)
}

// at returns where the parameters of a mode begin.
func (m *model) at(mode int) int { return m.column(optionals) + mode*m.perMode() }

// parameters returns how many there are.
func (m *model) parameters() int { return m.at(m.modes) }

// armOf returns a mode of a vector of parameters, network known.
func (m *model) armOf(params []float64, mode int) arm {
	p := params[m.at(mode):]
	return arm{p[ResonanceHz], math.Max(math.Exp(p[LogResistance]), leastResistanceOhm), math.Exp(p[LogInductance])}
}

// leastResistanceOhm is what stands for no resistance: a mode of which only the tail is seen, or one point beside it, may have none at all, and
// its logarithm is not followed any further.
const leastResistanceOhm = 1e-6

// prepare makes room and puts the model at no modes at all.
func (m *model) prepare(s *samples) {
	m.s, m.modes, m.neighbour = s, 0, nil
	m.conductance, m.phase, m.stretched, m.memory = false, false, false, false
	m.shunt, m.weight, m.rung = grown(m.shunt, s.n), grown(m.weight, s.n), grown(m.rung, s.n)
}

// remember switches the memory of the resonator on.
func (m *model) remember() {
	m.memory = true
	m.ring.set(m.s, 1)
}

// Evaluate computes residuals and, unless jacobian is nil, derivatives, column by column.
func (m *model) Evaluate(params, residual, jacobian []float64) {
	if !m.exists(params) {
		residual[0] = math.NaN()
		return
	}
	for k := range m.modes {
		m.arms[k] = grown(m.arms[k], m.s.n)
	}
	if m.memory && m.stretched {
		m.ring.set(m.s, math.Exp(m.value(params, timeStretch)))
	}
	if m.s.unknown {
		m.evaluateShape(params, residual, jacobian)
		return
	}
	m.evaluateArms(params, residual, jacobian)
}

const (
	narrowestOfStep = 0.01 // half-width, in steps of the sweep, below which no mode is followed: it lives between two points
	widestOfSpan    = 2.0  // and above which it is none: in spans of the sweep
	mostStretch     = 0.2  // of the logarithm of a factor on all times: a source that is so far off was not described
	furthestOfSpan  = 0.5  // how far beyond the edge a mode may lie
)

// exists says whether the parameters are within what the sweep can tell at all. The solver turns back at the border.
func (m *model) exists(params []float64) bool {
	s := m.s
	span := s.span()
	if math.Abs(m.value(params, timeStretch)) > mostStretch {
		return false
	}
	for k := range m.modes {
		p := params[m.at(k):]
		// NaN is outside as well, here and below.
		if !(p[ResonanceHz] > s.lowHz-furthestOfSpan*span && p[ResonanceHz] < s.highHz+furthestOfSpan*span) {
			return false
		}
		var half, loaded float64
		if s.unknown {
			half = math.Exp(p[1])
			loaded = half
		} else {
			a := m.armOf(params, k)
			half = a.resistance / (4 * math.Pi * a.inductance)
			// At most: whatever else is parallel takes its part of the network's resistance.
			loaded = half + length(s.source[s.nearest(a.offsetHz)])/(4*math.Pi*a.inductance)
		}
		if !(half < widestOfSpan*span && loaded > narrowestOfStep*s.meanStepHz) {
			return false
		}
	}
	return true
}

// evaluateArms is the model in a known network. With g = 1/Z of each arm and h = dF/dY,
//
//	Y = G0 + j w C0 + sum g,    F = Y/(1 + C Y),    h = 1/(1 + C Y)^2
//	dF/dp = -h g^2 dZ/dp
//
// Loops run over one mode at a time: each writes three columns, and the next finds its inputs still in the cache.
func (m *model) evaluateArms(params, residual, jacobian []float64) {
	s := m.s
	n := s.n
	c0, g0 := params[0], m.value(params, shuntConductance)
	shunt, weight, rung := m.shunt[:n], m.weight[:n], m.rung[:n]
	offsets, inverse, angular := s.offsetHz[:n], s.inverse[:n], s.angular[:n]
	for i, w := range angular {
		shunt[i] = complex(g0, w*c0)
	}
	if a := m.neighbour; a != nil {
		twoPiL := 2 * math.Pi * a.inductance
		for i, f := range offsets {
			d := f - a.offsetHz
			shunt[i] += reciprocal(complex(a.resistance, twoPiL*d*(2-d*inverse[i])))
		}
	}
	for k := range m.modes {
		a := m.armOf(params, k)
		twoPiL, r := 2*math.Pi*a.inductance, a.resistance
		square := r * r
		g := m.arms[k][:n]
		for i, f := range offsets {
			d := f - a.offsetHz
			x := twoPiL * d * (2 - d*inverse[i])
			q := 1 / (square + x*x)
			y := complex(r*q, -x*q)
			g[i] = y
			shunt[i] += y
		}
	}
	if m.memory {
		m.ringArms(params, jacobian != nil)
	}
	turned := turn(-m.value(params, freePhase))
	for i, y := range shunt {
		u := reciprocal(1 + s.source[i]*y)
		f, h := y*u, u*u
		if m.memory {
			f += rung[i]
		}
		v := s.value[i]
		if m.phase {
			v = s.raw[i]*turned - s.open[i]
		}
		k := s.scale[i]
		residual[2*i], residual[2*i+1] = k*(real(f)-real(v)), k*(imag(f)-imag(v))
		weight[i] = complex(k*real(h), k*imag(h))
	}
	if jacobian == nil {
		return
	}
	column := func(k int) []float64 { return jacobian[2*n*k : 2*n*(k+1)] }
	byC := column(0)
	for i, h := range weight {
		byC[2*i], byC[2*i+1] = -angular[i]*imag(h), angular[i]*real(h)
	}
	if m.conductance {
		byG := column(m.column(shuntConductance))
		for i, h := range weight {
			byG[2*i], byG[2*i+1] = real(h), imag(h)
		}
	}
	if m.phase {
		byPhase := column(m.column(freePhase))
		for i, v := range s.raw {
			t := v * turned
			byPhase[2*i], byPhase[2*i+1] = -s.scale[i]*imag(t), s.scale[i]*real(t)
		}
	}
	if m.stretched {
		clear(column(m.column(timeStretch)))
	}
	for k := range m.modes {
		a := m.armOf(params, k)
		first := m.at(k)
		byFs, byR, byL := column(first), column(first+1), column(first+2)
		twoPiL, r := 2*math.Pi*a.inductance, a.resistance
		for i, g := range m.arms[k][:n] {
			d := offsets[i] - a.offsetHz
			bend := d * inverse[i]
			x, slope := twoPiL*d*(2-bend), 2*twoPiL*(1-bend)
			h := weight[i] * g * g
			re, im := -real(h), -imag(h)
			byFs[2*i], byFs[2*i+1] = slope*im, -slope*re // dZ = -j slope
			byR[2*i], byR[2*i+1] = r*re, r*im            // dZ = R dlnR
			byL[2*i], byL[2*i+1] = -x*im, x*re           // dZ = jX dlnL
		}
	}
	if m.memory {
		m.ringJacobian(params, jacobian)
	}
}

// admittanceAt returns the unit's steady admittance at a point, one mode left out (none: -1), network known.
func (m *model) admittanceAt(params []float64, i, without int) complex128 {
	s := m.s
	y := complex(m.value(params, shuntConductance), s.angular[i]*params[0])
	if m.neighbour != nil {
		y += m.neighbour.admittance(s.offsetHz[i], s.inverse[i])
	}
	for k := range m.modes {
		if k != without {
			a := m.armOf(params, k)
			y += a.admittance(s.offsetHz[i], s.inverse[i])
		}
	}
	return y
}

// admittance returns 1/Z of the arm at an offset; inverse is one over the frequency.
func (a *arm) admittance(offsetHz, inverse float64) complex128 {
	d := offsetHz - a.offsetHz
	return reciprocal(complex(a.resistance, 2*math.Pi*a.inductance*d*(2-d*inverse)))
}

// seenBy returns the impedance that a mode beside the admittance y meets at a point: of network and all else, in ohm.
func (m *model) seenBy(y complex128, i int) complex128 {
	c := m.s.source[i]
	return c * reciprocal(1+c*y)
}

// lobe is a mode as the fixture shows it: height/(1 + j (f - centre)/half), offsets in hertz. Height is in siemens, and with an unknown network
// in raw samples; weight is the raw sample that one siemens gives there.
type lobe struct {
	centreHz, halfHz float64
	height           complex128
	weight           float64
}

// response returns the height in raw samples.
func (l *lobe) response() float64 { return length(l.height) * l.weight }

// lobeOf returns a mode of the vector of parameters as the fixture shows it.
func (m *model) lobeOf(params []float64, mode int) lobe {
	if m.s.unknown {
		p := params[m.at(mode):]
		return lobe{p[0], math.Exp(p[1]), complex(p[2], p[3]), 1}
	}
	a := m.armOf(params, mode)
	i := m.s.nearest(a.offsetHz)
	rest := m.admittanceAt(params, i, mode)
	z := m.seenBy(rest, i)
	whole := math.Max(a.resistance+real(z), a.resistance/2) // noise can make a fitted G0 negative, and with it what is seen
	l := lobe{
		centreHz: a.offsetHz - imag(z)/(4*math.Pi*a.inductance),
		halfHz:   whole / (4 * math.Pi * a.inductance),
		height:   complex(1/whole, 0),
	}
	l.weight = m.weightOf(rest, i)
	return l
}

// weightOf returns how much of the raw sample one siemens beside the admittance y makes at a point.
func (m *model) weightOf(y complex128, i int) float64 {
	return m.s.scale[i] / square(1+m.s.source[i]*y)
}

// append adds a lobe to the parameters as one mode more. Of a known network the resistance that is left beside the impedance seen may come out
// negative in noise; then it starts at a small part of the whole.
func (m *model) append(params []float64, l lobe) []float64 {
	if m.s.unknown {
		m.modes++
		return append(params, l.centreHz, math.Log(l.halfHz), real(l.height), imag(l.height))
	}
	i := m.s.nearest(l.centreHz)
	z := m.seenBy(m.admittanceAt(params, i, -1), i)
	const least = 0.02
	whole := 1 / math.Max(real(l.height), 1e-12)
	r := math.Max(whole-real(z), least*whole)
	inductance := whole / (4 * math.Pi * l.halfHz)
	m.modes++
	return append(params, l.centreHz+imag(z)/(4*math.Pi*inductance), math.Log(r), math.Log(inductance))
}
