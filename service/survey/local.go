package survey

import (
	"math"

	"example.com/admit/service/leastsquares"
)

// local is one lobe fitted to what the model leaves, for itself and over the points around it: a leastsquares.Model of centre, ln half-width
// and height. In a known network the height is that of a conductance, one positive number (its logarithm is fitted): the phase is known. In an
// unknown one it has two parts.
type local struct {
	m        *model
	left     []complex128 // of the raw sample, what the model lacks; the whole sweep
	from, to int
	start    peak
	free     free
}

const (
	localReach    = 12.0 // half-widths on either side
	localPoints   = 6.0  // points on either side, at least
	localWidening = 20.0 // how far the width may move from its template, as a factor
	localMoving   = 3.0  // how far the centre may move, in half-widths
)

func (o *local) parameters() int {
	if o.m.s.unknown {
		return 4
	}
	return 3
}

// place chooses the points around a peak.
func (o *local) place(p peak) {
	s := o.m.s
	o.start = p
	reach := math.Max(localReach*p.halfHz, localPoints*s.meanStepHz)
	o.from, o.to = 0, s.n
	if !s.ordered {
		return
	}
	if s.stepHz != 0 {
		middle, step := (p.centreHz-s.offsetHz[0])/s.stepHz, math.Abs(s.stepHz)
		after := 0.0
		if o.m.memory {
			after = 2 * ringingReach / (2 * math.Pi * p.halfHz * o.m.ring.dwell)
		}
		o.from = int(math.Max(0, middle-reach/step))
		o.to = int(math.Min(float64(s.n), middle+reach/step+after+1))
		return
	}
	if o.m.memory {
		return
	}
	first, last := s.n, 0
	for i, f := range s.offsetHz {
		if math.Abs(f-p.centreHz) <= reach {
			first, last = min(first, i), i+1
		}
	}
	o.from, o.to = first, last
}

// unit returns the response of unit height at a point, and its derivatives by centre and ln half-width.
func (o *local) unit(i int, centre, half float64) (y, byCentre, byHalf complex128) {
	d := o.m.s.offsetHz[i] - centre
	q := 1 / (d*d + half*half)
	pole := complex(d*q, half*q) // 1/(f - q)
	slope := pole * pole
	if o.m.memory {
		pole += o.free.value[i-o.from]
		slope += o.free.byPole[i-o.from]
	}
	up := complex(0, -half)
	y = up * pole
	byCentre = up * slope
	byHalf = byCentre*complex(0, half) + y
	return y, byCentre, byHalf
}

// Evaluate is that of a leastsquares.Model.
func (o *local) Evaluate(params, residual, jacobian []float64) {
	centre, half := params[0], math.Exp(params[1])
	// NaN is outside as well.
	if !(half < o.start.halfHz*localWidening && half > o.start.halfHz/localWidening && half > narrowestOfStep*o.m.s.meanStepHz &&
		math.Abs(centre-o.start.centreHz) < localMoving*o.start.halfHz+o.m.s.meanStepHz && params[2] < 200) {
		residual[0] = math.NaN()
		return
	}
	height := complex(math.Exp(params[2]), 0)
	if o.m.s.unknown {
		height = complex(params[2], params[3])
	}
	if o.m.memory {
		o.free.resize(o.to - o.from)
		o.m.ring.run(complex(centre, half), o.from, o.to, &o.free, jacobian != nil, false)
	}
	rows := 2 * (o.to - o.from)
	for i := o.from; i < o.to; i++ {
		y, byCentre, byHalf := o.unit(i, centre, half)
		w := o.m.weight[i]
		v := w * y
		e := height*v - o.left[i]
		j := 2 * (i - o.from)
		residual[j], residual[j+1] = real(e), imag(e)
		if jacobian == nil {
			continue
		}
		w *= height
		c, h := w*byCentre, w*byHalf
		jacobian[j], jacobian[j+1] = real(c), imag(c)
		jacobian[rows+j], jacobian[rows+j+1] = real(h), imag(h)
		if o.m.s.unknown {
			jacobian[2*rows+j], jacobian[2*rows+j+1] = real(v), imag(v)
			jacobian[3*rows+j], jacobian[3*rows+j+1] = -imag(v), real(v)
			continue
		}
		v *= height // by the logarithm
		jacobian[2*rows+j], jacobian[2*rows+j+1] = real(v), imag(v)
	}
}

// fit fits the lobe from a peak and returns it with what it takes off the sum of squares; false if nothing like a mode fits, or if the peak itself
// takes off less than least.
func (o *local) fit(w *leastsquares.Workspace, p peak, least, floor float64) (lobe, float64, bool) {
	o.place(p)
	n := o.to - o.from
	if 2*n < o.parameters() {
		return lobe{}, 0, false
	}
	params := [4]float64{p.centreHz, math.Log(p.halfHz)}
	// The height that the peak has, to begin with.
	if o.m.memory {
		o.free.resize(n)
		o.m.ring.run(complex(p.centreHz, p.halfHz), o.from, o.to, &o.free, true, false)
	}
	var product complex128
	var energy, before float64
	for i := o.from; i < o.to; i++ {
		y, _, _ := o.unit(i, p.centreHz, p.halfHz)
		v := o.m.weight[i] * y
		product += o.left[i] * complex(real(v), -imag(v))
		energy += square(v)
		before += square(o.left[i])
	}
	if !(square(product) > least*energy) {
		return lobe{}, 0, false
	}
	height := product / complex(energy, 0)
	if o.m.s.unknown {
		params[2], params[3] = real(height), imag(height)
	} else {
		params[2] = math.Log(math.Max(real(height), 0.3*length(height)))
	}
	res := w.Fit(o, 2*n, params[:o.parameters()], leastsquares.Options{Tolerance: 0.3, ResidualFloor: floor, IterationLimit: 6})
	if res.Status == leastsquares.NotFinite || res.Status == leastsquares.Malformed {
		return lobe{}, 0, false
	}
	l := lobe{centreHz: params[0], halfHz: math.Exp(params[1]), height: complex(params[2], params[3]), weight: 1}
	if !o.m.s.unknown {
		l.height = complex(math.Exp(params[2]), 0)
		l.weight = length(o.m.weight[o.m.s.nearest(l.centreHz)])
	}
	return l, before - res.SumOfSquares, true
}

// subtract takes a lobe off what is left.
func (o *local) subtract(l lobe) {
	o.from, o.to = 0, o.m.s.n
	if o.m.memory {
		o.free.resize(o.to)
		o.m.ring.run(complex(l.centreHz, l.halfHz), o.from, o.to, &o.free, true, false)
	}
	for i := range o.left {
		y, _, _ := o.unit(i, l.centreHz, l.halfHz)
		o.left[i] -= o.m.weight[i] * y * l.height
	}
}
