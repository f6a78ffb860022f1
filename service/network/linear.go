package network

import (
	"math"
	"math/cmplx"
)

// three are the terms at one frequency, with D = 1.
type three struct{ a, b, c complex128 }

func (m three) plus(o three, scale complex128) three {
	return three{m.a + scale*o.a, m.b + scale*o.b, m.c + scale*o.c}
}

func (m three) minus(o three) three { return three{m.a - o.a, m.b - o.b, m.c - o.c} }

func (m three) finite() bool { return finite(m.a) && finite(m.b) && finite(m.c) }

// sample returns T of the admittance v/u.
func (m three) sample(u, v complex128) complex128 { return (m.a*u + m.b*v) / (u + m.c*v) }

// reading is one standard at one frequency: its admittance v/u, its sample, and how much it counts.
type reading struct {
	u, v, sample complex128
	weight       float64 // 1 over the standard deviation of the sample; only ratios matter
}

// equations solves the terms from readings; it keeps its buffers. The zero value is ready.
type equations struct {
	columns [4][]complex128 // A, B, C and the right-hand side
}

// solve returns the terms that fit the readings best in the plane of the samples, and false when the readings do not tell the terms apart.
//
//	T (u + C v) = A u + B v        divided by u + C v, times the weight: linear in A, B, C
//
// The C of that divisor is about, a guess of the termination in ohm: it only weighs the rows, and three readings are solved exactly
// whatever it is. Rows and columns are scaled to order one before an orthogonalisation by modified Gram-Schmidt with the right-hand side
// carried along, which is as stable as Householder's for least squares (Bjorck 1967, from memory).
func (e *equations) solve(readings []reading, about complex128, scaleOhm float64) (three, bool) {
	largest := 0.0
	for _, r := range readings {
		largest = math.Max(largest, abs(r.sample))
	}
	if largest == 0 {
		return three{}, false
	}
	for k := range e.columns {
		e.columns[k] = resized(e.columns[k], len(readings))
	}
	for i, r := range readings {
		w := complex(r.weight, 0) / (r.u + about*r.v)
		u, v := w*r.u, w*r.v*complex(scaleOhm, 0)
		t := r.sample / complex(largest, 0)
		e.columns[0][i], e.columns[1][i], e.columns[2][i], e.columns[3][i] = u, v, -t*v, t*u
	}
	var upper [3][4]complex128
	for k := range 3 {
		before := norm(e.columns[k])
		for m := range k {
			before = math.Hypot(before, abs(upper[m][k]))
		}
		after := norm(e.columns[k])
		if !(after > 1e-10*before) {
			return three{}, false
		}
		upper[k][k] = complex(after, 0)
		for i := range e.columns[k] {
			e.columns[k][i] /= complex(after, 0)
		}
		for m := k + 1; m < 4; m++ {
			var dot complex128
			for i, q := range e.columns[k] {
				dot += cmplx.Conj(q) * e.columns[m][i]
			}
			upper[k][m] = dot
			for i, q := range e.columns[k] {
				e.columns[m][i] -= dot * q
			}
		}
	}
	c := upper[2][3] / upper[2][2]
	b := (upper[1][3] - upper[1][2]*c) / upper[1][1]
	a := (upper[0][3] - upper[0][2]*c - upper[0][1]*b) / upper[0][0]
	// The unknowns so far are A/largest, B/(largest scale) and C/scale.
	height, scale := complex(largest, 0), complex(scaleOhm, 0)
	terms := three{a * height, b * height * scale, c * scale}
	return terms, terms.finite()
}

func norm(column []complex128) float64 {
	sum := 0.0
	for _, z := range column {
		sum += square(z)
	}
	return math.Sqrt(sum)
}
