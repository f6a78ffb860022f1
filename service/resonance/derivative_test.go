package resonance

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/leastsquares"
	"example.com/admit/service/sweep"
)

// derivatives holds every column of a Jacobian against Richardson-extrapolated differences of the residuals.
func derivatives(t *testing.T, name string, m leastsquares.Model, params, steps []float64, rows int) {
	t.Helper()
	residual, jacobian := make([]float64, rows), make([]float64, rows*len(params))
	m.Evaluate(params, residual, jacobian)
	at := func(k int, h float64) []float64 {
		x := append([]float64(nil), params...)
		x[k] += h
		out := make([]float64, rows)
		m.Evaluate(x, out, nil)
		return out
	}
	for k, h := range steps {
		a, b, c, d := at(k, h), at(k, -h), at(k, h/2), at(k, -h/2)
		var worst, largest float64
		for i := range rows {
			coarse, fine := (a[i]-b[i])/(2*h), (c[i]-d[i])/h
			worst = math.Max(worst, math.Abs((4*fine-coarse)/3-jacobian[k*rows+i]))
			largest = math.Max(largest, math.Abs(jacobian[k*rows+i]))
		}
		if !(worst <= 1e-7*largest) {
			t.Errorf("%s: derivative by parameter %d off by %.2g of its largest, %.2g", name, k, worst/largest, largest)
		}
	}
	without := make([]float64, rows)
	m.Evaluate(params, without, nil)
	for i := range without {
		if without[i] != residual[i] {
			t.Fatalf("%s: residual %d is %v with and %v without derivatives", name, i, residual[i], without[i])
		}
	}
}

func TestDerivatives(t *testing.T) {
	rng := random(t, 7)
	for _, p := range parts() {
		for _, in := range []fixture{p.in, reflection, admittances, impedances, {"rotated", 0.1i, -30 + 20i, 60 - 25i, 1, sweep.S11}} {
			bw := p.unit.bandwidth(in)
			u := p.unit
			u.g0 = 1e-6
			req := noisy(measured(u, in, grid(u.fs, 3*bw, 31)), 0.1*u.peak(in), rng)
			var points points
			points.prepare(req)
			for _, m := range []forward{
				{}, {conductance: true}, {phase: true}, {conductance: true, phase: true},
				{memory: true}, {memory: true, conductance: true, phase: true, stretched: true}, {memory: true, stretched: true},
			} {
				if m.memory && in.d == 0 {
					continue
				}
				m.points = &points
				m.timing = timing{dwell: 0.11 / bw, averaging: 0.07 / bw, leadIn: 0.2 / bw}
				n := m.parameters()
				params, steps := make([]float64, n), make([]float64, n)
				for _, v := range []struct {
					p           Parameter
					value, step float64
				}{
					{ResonanceHz, 0.3*bw + u.fs - points.referenceHz, 1e-3 * bw},
					{LogResistance, math.Log(u.r1) + .1, 1e-3}, {LogInductance, math.Log(u.l1) - .1, 1e-3},
					{ShuntCapacitanceFarad, u.c0 * 1.1, 1e-2 * u.c0}, {ShuntConductanceSiemens, 2e-6, 1e-8},
					{PhaseRad, 0.2, 1e-3}, {logStretch, 0.1, 1e-3},
				} {
					if k := m.column(v.p); k >= 0 {
						params[k], steps[k] = v.value, v.step
					}
				}
				derivatives(t, p.name+" "+in.name, &m, params, steps, 2*points.n)
			}
		}
		var points points
		req := measured(p.unit, p.in, grid(p.unit.fs, 3*p.unit.bandwidth(p.in), 31))
		req.ScaleUnknown = true
		points.prepare(req)
		bw := p.unit.bandwidth(p.in)
		for _, m := range []shape{{}, {memory: true}, {memory: true, stretched: true}} {
			memory, stretched := m.memory, m.stretched
			m.prepare(&points)
			m.memory, m.stretched, m.timing = memory, stretched, timing{dwell: 0.11 / bw, averaging: 0.11 / bw}
			params := []float64{0.2 * bw, math.Log(bw / 3), 0.3, -0.4, 0.01, 0.02, 0.03, -0.01, 0.1}[:m.parameters()]
			steps := []float64{1e-3 * bw, 1e-3, 1e-3, 1e-3, 1e-3, 1e-3, 1e-3, 1e-3, 1e-3}[:m.parameters()]
			derivatives(t, p.name+" shape", &m, params, steps, 2*points.n)
		}
		var m power
		m.prepare(&points)
		params := []float64{0.2 * bw, math.Log(bw / 3), 0.3, -0.4, 0.5, 0.03}
		steps := []float64{1e-3 * bw, 1e-3, 1e-3, 1e-3, 1e-3, 1e-3}
		derivatives(t, p.name+" power", &m, params, steps, 2*points.n)
	}
}

func TestMeanExp(t *testing.T) {
	for _, z := range []complex128{0.0499, 0.0501, -0.03 + 0.0199i, -0.03 + 0.0201i, 0.05i, -3 + 4i, 1e-9, 2i} {
		// By Simpson's rule on the defining integrals, of exp(uz) and u exp(uz), in 2000 steps.
		var mean, slope complex128
		const n = 2000
		for i := range n + 1 {
			u, w := complex(float64(i)/n, 0), complex(2.0/3/n, 0)
			switch {
			case i == 0 || i == n:
				w /= 2
			case i%2 == 1:
				w *= 2
			}
			mean += w * cmplx.Exp(u*z)
			slope += w * u * cmplx.Exp(u*z)
		}
		got, gotSlope := meanExp(z, cmplx.Exp(z))
		if cmplx.Abs(got-mean) > 1e-12 || cmplx.Abs(gotSlope-slope) > 1e-11 {
			t.Errorf("z = %v: (%v, %v), want (%v, %v)", z, got, gotSlope, mean, slope)
		}
	}
	_ = rand.Int
}
