package survey

import (
	"fmt"
	"math"
	"testing"

	"example.com/admit/service/network"
)

// prepared returns a model over the samples of a request.
func prepared(req *Request) *model {
	s, m := new(samples), new(model)
	if req.Terms == nil {
		req.Terms = &network.Terms{}
	}
	s.prepare(req)
	m.prepare(s)
	return m
}

// paramsOf returns the parameters of a unit, network known.
func paramsOf(m *model, u truth) []float64 {
	p := []float64{u.c0}
	if m.conductance {
		p = append(p, u.g0)
	}
	if m.phase {
		p = append(p, 0)
	}
	if m.stretched {
		p = append(p, 0)
	}
	for _, b := range u.modes {
		p = append(p, b.fs-m.s.referenceHz, math.Log(b.r), math.Log(b.l))
	}
	m.modes = len(u.modes)
	return p
}

func threeModes(n fixture) truth {
	u := tenMegahertz()
	main := u.modes[0]
	u.modes = append(u.modes, unwanted(main, n, 10.0012e6, 2, 600), unwanted(main, n, 9.994e6, 20, 90))
	u.g0 = 1e-7
	return u
}

// The model gives the samples of the tests' own circuit, settled to rounding, and ringing to what the second half of the spectrum, which an
// envelope leaves out, can add: 1/Q.
func TestModelGivesSamples(t *testing.T) {
	for _, n := range []fixture{piNetwork, skewNetwork, seriesThrough, reflection, admittances, impedances} {
		u := threeModes(n)
		f := grid(9.99e6, 10.01e6, 401)
		for _, dwell := range []float64{0, 20e-6, 100e-6, 700e-6} {
			if dwell > 0 && (n.name == "admittance" || n.name == "impedance") {
				continue
			}
			req, most := settled(u, n, f), 1e-11
			if dwell > 0 {
				req, most = ringing(u, n, f, dwell, dwell/2), 3e-5
			}
			m := prepared(req)
			m.conductance = true
			if dwell > 0 {
				m.remember()
			}
			p := paramsOf(m, u)
			r := make([]float64, 2*m.s.n)
			m.Evaluate(p, r, nil)
			worst := 0.0
			for _, v := range r {
				worst = math.Max(worst, math.Abs(v))
			}
			if worst /= u.peak(n); !(worst < most) {
				t.Errorf("%s, dwell %g s: off by %.3g of the peak", n.name, dwell, worst)
			}
			t.Logf("%s, dwell %g s: %.3g of the peak", n.name, dwell, worst)
		}
	}
}

// Every column of the Jacobian is the derivative of the residuals.
func TestDerivatives(t *testing.T) {
	for _, n := range []fixture{skewNetwork, reflection, admittances, impedances} {
		for _, unknown := range []bool{false, true} {
			for _, memory := range []bool{false, true} {
				u := threeModes(n)
				f := grid(9.99e6, 10.01e6, 201)
				req := settled(u, n, f)
				if memory {
					if n.d == 0 || n.c == 0 {
						continue
					}
					req = ringing(u, n, f, 150e-6, 60e-6)
					req.Sweep.Timing.LeadIn = 300000
				}
				req.ScaleUnknown = unknown
				m := prepared(req)
				m.conductance, m.phase, m.stretched = !unknown, !unknown && n.d != 0, memory
				if memory {
					m.remember()
				}
				var p []float64
				if unknown {
					p = []float64{0.01, -0.02, 0.003, 0.001}
					if memory {
						p = append(p, 0.02)
					}
					for _, b := range u.modes {
						p = append(p, b.fs-m.s.referenceHz, math.Log(b.width(n)/2), 0.3, -0.1)
					}
					m.modes = len(u.modes)
				} else {
					p = paramsOf(m, u)
					if m.phase {
						p[m.column(freePhase)] = 0.02
					}
				}
				name := fmt.Sprintf("%s, unknown %v, memory %v", n.name, unknown, memory)
				rows := 2 * m.s.n
				r, jacobian := make([]float64, rows), make([]float64, rows*len(p))
				m.Evaluate(p, r, jacobian)
				plus, minus := make([]float64, rows), make([]float64, rows)
				for k := range p {
					h := 1e-5
					switch {
					case !unknown && k == 0:
						h = 1e-17
					case !unknown && k == 1:
						h = 1e-9
					case k >= m.at(0) && (k-m.at(0))%m.perMode() == 0:
						h = 1e-2
					}
					q := append([]float64(nil), p...)
					q[k] = p[k] + h
					m.Evaluate(q, plus, nil)
					q[k] = p[k] - h
					m.Evaluate(q, minus, nil)
					largest, worst := 0.0, 0.0
					for i := range rows {
						d := (plus[i] - minus[i]) / (2 * h)
						largest = math.Max(largest, math.Abs(d))
						worst = math.Max(worst, math.Abs(d-jacobian[k*rows+i]))
					}
					if !(worst < 2e-6*largest) {
						t.Errorf("%s: parameter %d off by %.3g of %.3g", name, k, worst, largest)
					}
				}
			}
		}
	}
}
