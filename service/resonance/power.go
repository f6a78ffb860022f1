package resonance

import "math"

// power is the model of magnitudes in a fixture network that is not known. A resonance over a background, both of unknown complex size, has
// the power
//
//	|T|^2 = |b + a y|^2 = e0 + e1 x + (c + d t)/(1 + t^2),    c = |a|^2 + 2 Re(a conj b),  d = 2 Im(a conj b)
//
// with y and t of shape, and x from -1 to 1 over the sweep: e1 stands for a background that changes along it. What a and b are cannot be told
// (two pairs of them give the same c and d), but c and d are free and regular at any shape of the response, a peak, a dip or a bend, so
// centre and width come with the covariance that magnitudes leave them. Through the magnitude of a crystal's pole alone, without the
// background, the skirts would be taken for the width.
//
// It is the inner model of magnitude: residuals are pairs |T|, 0. The parameters are the offset of fs, ln half, c, d, e0 and e1.
type power struct {
	points       *points
	middle, half float64 // of the sweep
	least        float64 // |T| is taken as no less, in units of the raw sample: far below the noise, where nothing depends on it
}

const (
	powerPeak       = iota + shapeAmplitude // c
	powerBend                               // d
	powerBackground                         // e0
	powerSlope                              // e1
	powerParameters
)

func (m *power) prepare(p *points) {
	low, high := p.span()
	*m = power{points: p, middle: (low + high) / 2, half: (high - low) / 2}
}

func (m *power) parts() int      { return 2 }
func (m *power) parameters() int { return powerParameters }

// start takes a pole of scanPower, which holds c + jd as its residue and e0 as its background.
func (m *power) start(q pole, out []float64) {
	clear(out)
	out[shapeOffset], out[shapeLogHalf] = q.centreHz, math.Log(q.halfHz)
	out[powerPeak], out[powerBend] = real(q.residue), imag(q.residue)
	out[powerBackground] = real(q.background)
}

// inFixture has as the response the range of magnitudes that the resonance passes through: (c + d t)/(1 + t^2) lies between
// (c - |c + jd|)/2 and (c + |c + jd|)/2.
func (m *power) inFixture(params []float64) loaded {
	c, e0 := params[powerPeak], params[powerBackground]
	length := math.Hypot(c, params[powerBend])
	root := func(v float64) float64 { return math.Sqrt(math.Max(v, 0)) }
	return loaded{
		centreHz: params[shapeOffset], halfHz: math.Exp(params[shapeLogHalf]),
		response: root(e0+(c+length)/2) - root(e0+(c-length)/2),
	}
}

// Evaluate is that of a leastsquares.Model. The derivative of |T| = sqrt(P) rises without end as P goes to 0, but what magnitude multiplies it
// with falls as |T|; a P below 0 is no power, and there nothing depends on it.
func (m *power) Evaluate(params, residual, jacobian []float64) {
	p := m.points
	rows := 2 * p.n
	offset, half := params[shapeOffset], math.Exp(params[shapeLogHalf])
	c, d := params[powerPeak], params[powerBend]
	e0, e1 := params[powerBackground], params[powerSlope]
	fs := p.referenceHz + offset
	for i := range p.n {
		away := p.offsetHz[i] - offset
		t := away * (2 - away*p.inverse[i]) / (2 * half)
		a := 1 / (1 + t*t)
		x := (p.offsetHz[i] - m.middle) / m.half
		response := (c + d*t) * a
		square := e0 + e1*x + response
		length := math.Max(math.Sqrt(math.Max(square, 0)), m.least)
		residual[2*i], residual[2*i+1] = length, 0
		if jacobian == nil {
			continue
		}
		slope := 1 / (2 * length)
		if square < 0 {
			slope = 0
		}
		byT := (d - 2*t*response) * a
		column := func(k int, v float64) { jacobian[k*rows+2*i], jacobian[k*rows+2*i+1] = slope*v, 0 }
		column(shapeOffset, byT*-fs*p.inverse[i]/half)
		column(shapeLogHalf, byT*-t)
		column(powerPeak, a)
		column(powerBend, a*t)
		column(powerBackground, 1)
		column(powerSlope, x)
	}
}
