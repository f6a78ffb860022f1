package resonance

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/sweep"
)

// scaledBessel returns I0(x) exp(-x) and I1(x) exp(-x) by the trapezium rule on their integrals over a half turn, which converges
// faster than any power.
func scaledBessel(x float64) (zero, one float64) {
	n := 40 + 6*int(math.Sqrt(x)) // the integrand is as narrow as 1/sqrt(x)
	for k := range n + 1 {
		a := math.Pi * float64(k) / float64(n)
		w := 1 / float64(n)
		if k == 0 || k == n {
			w /= 2
		}
		e := w * math.Exp(x*(math.Cos(a)-1))
		zero += e
		one += e * math.Cos(a)
	}
	return zero, one
}

func TestBessel(t *testing.T) {
	for _, x := range []float64{0, 1e-3, 0.5, 1, 5, 15.9, 16.1, 40, 700, 5000} {
		zero, one := scaledBessel(x)
		log, ratio := bessel(x)
		if math.Abs(log-math.Log(zero)) > 2e-12 || math.Abs(ratio-one/zero) > 2e-12 {
			t.Errorf("x = %g: (%.15g, %.15g), want (%.15g, %.15g)", x, log, ratio, math.Log(zero), one/zero)
		}
	}
}

// riceInformation is the Fisher information of one Rice distributed sample about its level u, both in standard deviations of one part: by
// integration of the square of the score.
func riceInformation(u float64) float64 {
	var sum float64
	const n = 250
	h := (u + 9) / n
	for k := 1; k < n; k++ {
		v := h * float64(k)
		zero, one := scaledBessel(u * v)
		score := v*one/zero - u
		sum += h * v * math.Exp(-(u-v)*(u-v)/2) * zero * score * score
	}
	return sum
}

// riceTable interpolates riceInformation, which costs a double integral, in a table up to 20; beyond it is 1 - 1/(2 u^2) to 1e-5.
type riceTable []float64

func newRiceTable() riceTable {
	t := make(riceTable, 202)
	for k := range t {
		t[k] = riceInformation(float64(k) / 10)
	}
	return t
}

func (t riceTable) at(u float64) float64 {
	if u >= 20 {
		return 1 - 1/(2*u*u)
	}
	k := int(u * 10)
	return t[k] + (u*10-float64(k))*(t[k+1]-t[k])
}

func magnitudes(req *Request) *Request {
	s := *req.Sweep
	s.Quantity = sweep.S21Magnitude
	s.Re = append([]float64(nil), s.Re...)
	for i := range s.Re {
		s.Re[i] = math.Hypot(s.Re[i], s.Im[i])
	}
	s.Im = nil
	out := *req
	out.Sweep = &s
	return &out
}

// bound is the bound of magnitudes: the part of each derivative along the sample, weighted by the Rice information there.
func (t riceTable) bound(u truth, n fixture, frequencies []float64, rms float64) [5]float64 {
	s := rms / math.Sqrt2
	weights := make([]complex128, len(frequencies))
	for i, f := range frequencies {
		v := n.sample(u.admittance(f))
		weights[i] = cmplx.Conj(v) / complex(cmplx.Abs(v), 0) * complex(math.Sqrt(t.at(cmplx.Abs(v)/s)), 0)
	}
	return bound(u, n, frequencies, rms, func(n fixture, u truth, i int) complex128 {
		return complex(real(n.sample(u.admittance(frequencies[i]))*weights[i]), 0)
	})
}

// TestMagnitudeEfficiency: magnitudes reach the bound of the Rice distribution, from near the noise floor up.
func TestMagnitudeEfficiency(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 150
	if testing.Short() {
		trials = 30
	}
	rice := newRiceTable()
	var all tally
	for _, p := range parts() {
		bw := p.unit.bandwidth(p.in)
		frequencies := grid(p.unit.fs, 5*bw, 401)
		clean := measured(p.unit, p.in, frequencies)
		for _, snr := range []float64{20, 40, 60, 80} {
			rms := p.unit.peak(p.in) / decibels(snr)
			limit := rice.bound(p.unit, p.in, frequencies, rms)
			var cell tally
			var f Fitter
			var est Estimate
			for trial := range trials {
				req := magnitudes(noisy(clean, rms, rng))
				if trial%2 == 0 {
					req.NoiseRMS = rms
				}
				req.Expected.ShuntCapacitanceFarad = 1.2 * p.unit.c0
				if f.Fit(req, &est); est.State != Found {
					t.Fatalf("%s at %g dB: %s %s", p.name, snr, est.State, est.Detail)
				}
				cell.add(&est, p.unit, limit)
			}
			// At 20 dB the likelihood of C0 is no longer a parabola over its own width.
			slack, bias := 0.03, 0.03
			if snr == 20 {
				slack, bias = 0.12, 0.3
			}
			cell.check(t, fmt.Sprintf("%s at %g dB", p.name, snr), slack, bias, 0.02)
			if snr > 20 {
				all.merge(&cell)
			}
		}
	}
	all.check(t, "all from 40 dB", 0, 0.03, 0)
}

// TestMagnitudeGates: what a magnitude can tell of a fixture without a resonance.
func TestMagnitudeGates(t *testing.T) {
	rng := random(t, rand.Uint64())
	for _, p := range parts() {
		frequencies := grid(p.unit.fs, 5*p.unit.bandwidth(p.in), 401)
		rms := p.unit.peak(p.in) / decibels(60)
		for _, c := range []struct {
			name string
			y    func(f float64) complex128
			want State
		}{
			{"unit", p.unit.admittance, Found},
			{"open", func(float64) complex128 { return 0 }, NoUnit},
			{"short", func(float64) complex128 { return 500 / p.in.c }, Shorted},
			{"dead unit", func(f float64) complex128 { return complex(0, 2*math.Pi*f*p.unit.c0) }, NoResonance},
			{"resistor", func(float64) complex128 { return 1 / p.in.c }, NoResonance},
		} {
			for trial := range 10 {
				req := measured(p.unit, p.in, frequencies)
				for i, f := range frequencies {
					v := p.in.sample(c.y(f))
					req.Sweep.Re[i], req.Sweep.Im[i] = real(v), imag(v)
				}
				req = magnitudes(noisy(req, rms, rng))
				if trial%2 == 0 {
					req.NoiseRMS = rms
					req.Expected = Expected{p.unit.fs, p.unit.r1, p.unit.l1, p.unit.c0}
				}
				var f Fitter
				var est Estimate
				if f.Fit(req, &est); est.State != c.want {
					t.Errorf("%s, %s: %s %s, want %s", p.name, c.name, est.State, est.Detail, c.want)
				}
			}
		}
	}
}
