package resonance

import "math"

// shape is the model of one resonance in a fixture network that is not known: a free complex amplitude stands for whatever the network does to
// it, over a free background with a slope.
//
//	T = b0 + b1 x + a y,     y = 1/(1 + jt) when settled,     t = (f - fs)(f + fs)/(2 half f)
//
// x runs from -1 to 1 over the sweep. The parameters are the offset of fs, ln half, a, b0 and b1 (real and imaginary part each) and, where
// the timing is to be found, the logarithm of a factor on it. fs and Q = fs/(2 half) are those of the resonator loaded by the network;
// nothing in ohms can be had.
type shape struct {
	points       *points
	middle, half float64 // of the sweep
	memory       bool
	stretched    bool
	timing       timing
}

const (
	shapeOffset = iota
	shapeLogHalf
	shapeAmplitude      // and the next
	shapeBackground = 4 // and the next
	shapeSlope      = 6 // and the next
	shapeStretch    = 8 // if it is fitted
	shapeParameters = 8 // without it
)

func (m *shape) prepare(p *points) {
	low, high := p.span()
	*m = shape{points: p, middle: (low + high) / 2, half: (high - low) / 2}
}

func (m *shape) parts() int { return 2 }

func (m *shape) parameters() int {
	if m.stretched {
		return shapeParameters + 1
	}
	return shapeParameters
}

// start returns the parameters of a pole, at a background without slope.
func (m *shape) start(q pole, out []float64) {
	clear(out)
	amplitude := q.residue * complex(0, 1/q.halfHz) // residue/(f - centre - j half) is amplitude at the centre
	out[shapeOffset], out[shapeLogHalf] = q.centreHz, math.Log(q.halfHz)
	out[shapeAmplitude], out[shapeAmplitude+1] = real(amplitude), imag(amplitude)
	out[shapeBackground], out[shapeBackground+1] = real(q.background), imag(q.background)
}

func (m *shape) inFixture(params []float64) loaded {
	return loaded{
		centreHz: params[shapeOffset], halfHz: math.Exp(params[shapeLogHalf]),
		response: math.Hypot(params[shapeAmplitude], params[shapeAmplitude+1]),
	}
}

// Evaluate is that of a leastsquares.Model. The envelope obeys the same recurrence as in a known network, with lambda = -2 pi half (1 + jt).
func (m *shape) Evaluate(params, residual, jacobian []float64) {
	p := m.points
	rows := 2 * p.n
	offset, half := params[shapeOffset], math.Exp(params[shapeLogHalf])
	a := complex(params[shapeAmplitude], params[shapeAmplitude+1])
	b0 := complex(params[shapeBackground], params[shapeBackground+1])
	b1 := complex(params[shapeSlope], params[shapeSlope+1])
	clock := m.timing
	count := 2
	if m.stretched {
		clock = clock.stretchedBy(math.Exp(params[shapeStretch]))
		count = 3
	}
	fs := p.referenceHz + offset
	var state complex128
	var byState [3]complex128
	for i := range p.n {
		d := p.offsetHz[i] - offset
		t := d * (2 - d*p.inverse[i]) / (2 * half)
		y := reciprocal(complex(1, t))
		// By the offset: dt = -fs/(f half). By ln half: dt = -t.
		minus := complex(0, -1) * y * y
		dy := [3]complex128{minus * complex(-fs*p.inverse[i]/half, 0), minus * complex(-t, 0)}
		if m.memory {
			steady, bySteady := y, dy
			lambda := complex(-2*math.Pi*half, -2*math.Pi*half*t)
			byLambda := [3]complex128{complex(0, 2*math.Pi*fs*p.inverse[i]), complex(-2*math.Pi*half, 0), lambda}
			step := clock.transfer(lambda)
			if i == 0 {
				left, byLeft := clock.start(lambda)
				state = steady * (1 - left)
				for k := range count {
					byState[k] = bySteady[k]*(1-left) - steady*byLeft*byLambda[k]
				}
			}
			away := state - steady
			y = steady + away*step.mean
			for k := range count {
				away2 := byState[k] - bySteady[k]
				dy[k] = bySteady[k] + away2*step.mean + away*step.byMean*byLambda[k]
				byState[k] = bySteady[k] + away2*step.end + away*step.byEnd*byLambda[k]
			}
			state = steady + away*step.end
		}
		x := (p.offsetHz[i] - m.middle) / m.half
		e := b0 + complex(x, 0)*b1 + a*y - complex(p.re[i], p.im[i])
		residual[2*i], residual[2*i+1] = real(e), imag(e)
		if jacobian == nil {
			continue
		}
		column := func(k int, v complex128) { jacobian[k*rows+2*i], jacobian[k*rows+2*i+1] = real(v), imag(v) }
		column(shapeOffset, a*dy[0])
		column(shapeLogHalf, a*dy[1])
		column(shapeAmplitude, y)
		column(shapeAmplitude+1, complex(-imag(y), real(y)))
		column(shapeBackground, 1)
		column(shapeBackground+1, 1i)
		column(shapeSlope, complex(x, 0))
		column(shapeSlope+1, complex(0, x))
		if m.stretched {
			column(shapeStretch, a*dy[2])
		}
	}
}
