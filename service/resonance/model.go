package resonance

import "math"

// forward is the model of one mode in a linear fixture network. Its parameters are those of Parameter, in that order: fs as the offset from
// points.referenceHz, and after the first four those that are switched on. Residuals 2i and 2i+1 are the parts of (model - sample) at
// point i, in units of the raw sample: it is a leastsquares.Model.
//
// The resonator is in its steady state at every point, or, with timing given, still rings from earlier points (memory.go). Steady, with
//
//	Z  = R1 + jX,   X = 2 pi L1 (f - fs)(f + fs)/f,    Y = G0 + j w C0 + 1/Z,    F = Y/(1 + C Y)      (1/Y where the sample is an impedance)
//
// F is written without Y: with y0 = G0 + j w C0, P = 1 + y0 Z and Q = Z + C P it is P/Q (Z/P), and every derivative is that of Z or y0 times
// 1/Q^2 or Z^2/Q^2, so one division a point is enough.
type forward struct {
	points      *points
	conductance bool // G0 is a parameter
	phase       bool // so is a free phase of all samples
	memory      bool // the resonator rings, timed by timing
	stretched   bool // the logarithm of a factor on all times is a parameter
	timing      timing
}

// parameters returns how many there are.
func (m *forward) parameters() int {
	n := 4
	for _, on := range [...]bool{m.conductance, m.phase, m.stretched} {
		if on {
			n++
		}
	}
	return n
}

// parts returns how many residuals a sample has.
func (m *forward) parts() int { return 2 }

// logStretch stands for the factor on the times where a Parameter is asked for: it is none of the results.
const logStretch = Parameters

// column returns the place of a parameter in the vector of the fit, or -1.
func (m *forward) column(p Parameter) int {
	next := 4
	for _, optional := range [...]struct {
		parameter Parameter
		on        bool
	}{{ShuntConductanceSiemens, m.conductance}, {PhaseRad, m.phase}, {logStretch, m.stretched}} {
		switch {
		case p < ShuntConductanceSiemens:
			return int(p)
		case p == optional.parameter && !optional.on:
			return -1
		case p == optional.parameter:
			return next
		case optional.on:
			next++
		}
	}
	return -1
}

// value returns a parameter of the vector, 0 where it is not in it.
func (m *forward) value(params []float64, p Parameter) float64 {
	if k := m.column(p); k >= 0 {
		return params[k]
	}
	return 0
}

// columnOf returns the derivatives by a parameter within a Jacobian, nil where it is not in it.
func (m *forward) columnOf(jacobian []float64, p Parameter) []float64 {
	k := m.column(p)
	if k < 0 || jacobian == nil {
		return nil
	}
	rows := 2 * m.points.n
	return jacobian[k*rows : (k+1)*rows]
}

// Evaluate computes residuals and, unless jacobian is nil, derivatives, column by column.
func (m *forward) Evaluate(params, residual, jacobian []float64) {
	if m.memory {
		m.evaluateRinging(params, residual, jacobian)
		return
	}
	m.evaluateSettled(params, residual, jacobian)
}

func (m *forward) evaluateSettled(params, residual, jacobian []float64) {
	p := m.points
	n := p.n
	offset, r1, l1, c0 := params[0], math.Exp(params[1]), math.Exp(params[2]), params[3]
	g0, phase := m.value(params, ShuntConductanceSiemens), m.value(params, PhaseRad)
	turnIm, turnRe := math.Sincos(-phase)
	twoPiL := 2 * math.Pi * l1

	offsets, inverse, angular := p.offsetHz[:n], p.inverse[:n], p.angular[:n]
	sourceRe, sourceIm, scale := p.sourceRe[:n], p.sourceIm[:n], p.scale[:n]
	sampleRe, sampleIm := p.re[:n], p.im[:n]
	rawRe, rawIm, openRe, openIm := p.rawRe[:n], p.rawIm[:n], p.openRe[:n], p.openIm[:n]
	residual = residual[:2*n]
	byFs, byR := m.columnOf(jacobian, ResonanceHz), m.columnOf(jacobian, LogResistance)
	byL, byC := m.columnOf(jacobian, LogInductance), m.columnOf(jacobian, ShuntCapacitanceFarad)
	byG, byPhase := m.columnOf(jacobian, ShuntConductanceSiemens), m.columnOf(jacobian, PhaseRad)
	for i := range offsets {
		d := offsets[i] - offset // f - fs
		bend := d * inverse[i]
		x := twoPiL * d * (2 - bend) // (f + fs)/f = 2 - (f - fs)/f
		b := angular[i] * c0
		pr := 1 + g0*r1 - b*x
		pi := g0*x + b*r1
		var nr, ni, qr, qi, sign float64
		if p.impedance {
			nr, ni, qr, qi, sign = r1, x, pr, pi, -1
		} else {
			cr, ci := sourceRe[i], sourceIm[i]
			nr, ni, qr, qi, sign = pr, pi, r1+cr*pr-ci*pi, x+cr*pi+ci*pr, 1
		}
		inv := 1 / (qr*qr + qi*qi)
		ur, ui := qr*inv, -qi*inv // 1/Q
		fr, fi := nr*ur-ni*ui, nr*ui+ni*ur
		s := scale[i]
		vr, vi := sampleRe[i], sampleIm[i]
		var tr, ti float64
		if m.phase {
			tr, ti = rawRe[i]*turnRe-rawIm[i]*turnIm, rawRe[i]*turnIm+rawIm[i]*turnRe
			vr, vi = tr-openRe[i], ti-openIm[i]
		}
		residual[2*i], residual[2*i+1] = s*(fr-vr), s*(fi-vi)
		if jacobian == nil {
			continue
		}
		s *= sign
		hr, hi := s*(ur*ur-ui*ui), s*2*ur*ui                 // dF = h (-dZ + Z^2 dy0)
		slope := 2 * twoPiL * (1 - bend)                     // -dX/dfs
		byFs[2*i], byFs[2*i+1] = -slope*hi, slope*hr         // h j slope
		byR[2*i], byR[2*i+1] = -r1*hr, -r1*hi                // dZ = R dlnR
		byL[2*i], byL[2*i+1] = x*hi, -x*hr                   // dZ = jX dlnL
		zr, zi := r1*r1-x*x, 2*r1*x                          // Z^2
		gr, gi := hr*zr-hi*zi, hr*zi+hi*zr                   // by y0
		byC[2*i], byC[2*i+1] = -angular[i]*gi, angular[i]*gr // dy0 = j w dC0
		if byG != nil {
			byG[2*i], byG[2*i+1] = gr, gi
		}
		if byPhase != nil {
			byPhase[2*i], byPhase[2*i+1] = -scale[i]*ti, scale[i]*tr
		}
	}
}
