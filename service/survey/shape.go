package survey

import "math"

// Of a network that is not known the model is a sum of poles over a free background with a slope,
//
//	T = b0 + b1 x + sum_k ak/(1 + j (f - fk)/hk)
//
// x running from -1 to 1 over the sweep. Whatever linear network it is, the sample is of this form near the modes, and the poles are those of
// the loaded resonators: each rings by itself, with lambda = 2 pi j (fk + j hk - f). Parameters: b0 and b1 (real and imaginary part each), a
// factor on the times where it is switched on, and for each mode the offset of fk, ln hk and ak (two parts).
const (
	shapeBase    = 4
	shapePerMode = 4
)

// evaluateShape is the model in an unknown network.
func (m *model) evaluateShape(params, residual, jacobian []float64) {
	s := m.s
	n := s.n
	middle, half := (s.lowHz+s.highHz)/2, s.span()/2
	b0, b1 := complex(params[0], params[1]), complex(params[2], params[3])
	sum := m.shunt[:n]
	for i, f := range s.offsetHz[:n] {
		sum[i] = b0 + complex((f-middle)/half, 0)*b1 - s.value[i]
	}
	for k := range m.modes {
		p := params[m.at(k):]
		h := math.Exp(p[1])
		q := complex(p[0], h)
		up := complex(0, -h) // a/(1 + j(f - fk)/h) = -j h a/(f - q)
		a := complex(p[2], p[3]) * up
		y := m.arms[k][:n] // 1/(f - q), and what the free oscillation adds
		for i, f := range s.offsetHz[:n] {
			d := f - p[0]
			u := 1 / (d*d + h*h)
			y[i] = complex(d*u, h*u)
		}
		steady := y
		if m.memory {
			free := &m.free[k]
			free.resize(n)
			m.ring.run(q, 0, n, free, jacobian != nil, m.stretched)
			for i, v := range free.value {
				sum[i] += a * v
			}
		}
		for i, v := range steady {
			sum[i] += a * v
		}
		if jacobian == nil {
			continue
		}
		at := 2 * n * m.at(k)
		byF, byH, byRe, byIm := jacobian[at:at+2*n], jacobian[at+2*n:at+4*n], jacobian[at+4*n:at+6*n], jacobian[at+6*n:at+8*n]
		for i, v := range steady {
			dq := v * v
			if m.memory {
				dq += m.free[k].byPole[i]
				v += m.free[k].value[i]
			}
			dq *= a
			// dq/dln h = j h; the amplitude -j h a grows with h as well.
			byLog := dq*complex(0, h) + a*v
			v *= up
			j := 2*i + 1
			byF[j-1], byF[j] = real(dq), imag(dq)
			byH[j-1], byH[j] = real(byLog), imag(byLog)
			byRe[j-1], byRe[j] = real(v), imag(v)
			byIm[j-1], byIm[j] = -imag(v), real(v)
		}
	}
	for i, v := range sum {
		k := s.scale[i]
		residual[2*i], residual[2*i+1] = k*real(v), k*imag(v)
		m.weight[i] = complex(k, 0)
	}
	if jacobian == nil {
		return
	}
	one, j, slope, jSlope := jacobian[:2*n], jacobian[2*n:4*n], jacobian[4*n:6*n], jacobian[6*n:8*n]
	for i, f := range s.offsetHz[:n] {
		x := (f - middle) / half
		one[2*i], one[2*i+1] = 1, 0
		j[2*i], j[2*i+1] = 0, 1
		slope[2*i], slope[2*i+1] = x, 0
		jSlope[2*i], jSlope[2*i+1] = 0, x
	}
	if m.stretched {
		at := 2 * n * m.column(timeStretch)
		column := jacobian[at : at+2*n]
		clear(column)
		for k := range m.modes {
			p := params[m.at(k):]
			a := complex(p[2], p[3]) * complex(0, -math.Exp(p[1]))
			for i, v := range m.free[k].byStretch {
				add := a * v
				column[2*i] += real(add)
				column[2*i+1] += imag(add)
			}
		}
	}
	m.maskRows(jacobian)
}

// maskRows takes points that were left out off the Jacobian.
func (m *model) maskRows(jacobian []float64) {
	n := m.s.n
	for i, k := range m.s.scale {
		if k != 0 {
			continue
		}
		for p := range m.parameters() {
			jacobian[2*(n*p+i)], jacobian[2*(n*p+i)+1] = 0, 0
		}
	}
}
