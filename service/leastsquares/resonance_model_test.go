package leastsquares

import (
	"math"
	"math/rand/v2"
)

// lorentzian is the model of the tests: a complex resonance on a constant background,
//
//	s(x) = (a + jb)/(1 + j(x − c)/h) + d + je        params a b c h d e; fewer leave the background out
//
// in complex samples, sample i at residuals 2i and 2i+1.
type lorentzian struct {
	x, sample []float64
	calls     int
}

// newLorentzian lays points over span half-widths on both sides of the centre.
func newLorentzian(points int, span float64) *lorentzian {
	m := &lorentzian{x: make([]float64, points), sample: make([]float64, 2*points)}
	for i := range m.x {
		m.x[i] = span * (2*float64(i)/float64(points-1) - 1)
	}
	return m
}

// fill makes the samples those of params with noise of the given standard deviation in each part.
func (m *lorentzian) fill(params []float64, sigma float64, random *rand.Rand) {
	clear(m.sample)
	m.Evaluate(params, m.sample, nil)
	for i := range m.sample {
		m.sample[i] += sigma * random.NormFloat64()
	}
	m.calls = 0
}

func (m *lorentzian) Evaluate(params, residual, jacobian []float64) {
	m.calls++
	a, b, c, h := params[0], params[1], params[2], params[3]
	var d, e float64
	if len(params) > 4 {
		d = params[4]
	}
	if len(params) > 5 {
		e = params[5]
	}
	n := len(residual)
	for i, x := range m.x {
		u := (x - c) / h
		re := 1 / (1 + u*u)
		im := -u * re // 1/(1+ju) = re + j im
		residual[2*i] = a*re - b*im + d - m.sample[2*i]
		residual[2*i+1] = b*re + a*im + e - m.sample[2*i+1]
		if jacobian == nil {
			continue
		}
		// d/du of 1/(1+ju) is −j/(1+ju)².
		sr, si := 2*re*im, im*im-re*re
		gr, gi := a*sr-b*si, b*sr+a*si
		jacobian[2*i], jacobian[2*i+1] = re, im
		jacobian[n+2*i], jacobian[n+2*i+1] = -im, re
		jacobian[2*n+2*i], jacobian[2*n+2*i+1] = -gr/h, -gi/h
		jacobian[3*n+2*i], jacobian[3*n+2*i+1] = -gr*u/h, -gi*u/h
		if len(params) > 4 {
			jacobian[4*n+2*i], jacobian[4*n+2*i+1] = 1, 0
		}
		if len(params) > 5 {
			jacobian[5*n+2*i], jacobian[5*n+2*i+1] = 0, 1
		}
	}
}

// linear is y = A x, columns of A given; a solver must get there in one step.
type linear struct {
	column [][]float64
	y      []float64
}

func (m *linear) Evaluate(params, residual, jacobian []float64) {
	for i, y := range m.y {
		residual[i] = -y
		for k, c := range m.column {
			residual[i] += c[i] * params[k]
		}
	}
	if jacobian != nil {
		for k, c := range m.column {
			copy(jacobian[k*len(residual):], c)
		}
	}
}

// modelFunc is a model without state.
type modelFunc func(params, residual, jacobian []float64)

func (f modelFunc) Evaluate(params, residual, jacobian []float64) { f(params, residual, jacobian) }

func fixedRandom(seed uint64) *rand.Rand { return rand.New(rand.NewPCG(seed, 0x5eed)) }

// relative returns the relative error of got, +Inf where that is no number, so that NaN fails every comparison.
func relative(got, want float64) float64 {
	if e := math.Abs(got-want) / math.Abs(want); !math.IsNaN(e) {
		return e
	}
	return math.Inf(1)
}
