package resonance

import (
	"math"
	"math/rand/v2"
	"testing"
)

// instead replaces the samples of a request by those of an admittance.
func instead(req *Request, n fixture, y func(f float64) complex128) *Request {
	for i, f := range req.Sweep.FrequencyHz {
		v := n.sample(y(f))
		req.Sweep.Re[i], req.Sweep.Im[i] = real(v), imag(v)
	}
	return req
}

// TestNothing: what a sweep without a resonance is called, with and without the instrument's noise and an expected unit, with and without wild
// points.
func TestNothing(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 20
	if testing.Short() {
		trials = 4
	}
	for _, p := range parts() {
		frequencies := grid(p.unit.fs, 5*p.unit.bandwidth(p.in), 401)
		for _, c := range []struct {
			name string
			y    func(f float64) complex128
			want State
		}{
			{"open with 0.05 pF", func(f float64) complex128 { return complex(0, 2*math.Pi*f*0.05e-12) }, NoUnit},
			{"perfect open", func(float64) complex128 { return 0 }, NoUnit},
			{"short with 0.5 nH", func(f float64) complex128 { return 1 / complex(0.002*real(p.in.c), 2*math.Pi*f*0.5e-9) }, Shorted},
			{"dead unit", func(f float64) complex128 { return complex(0, 2*math.Pi*f*p.unit.c0) }, NoResonance},
			{"resistor", func(float64) complex128 { return 1 / p.in.c }, NoResonance},
			{"negative resistor", func(float64) complex128 { return -0.3 / p.in.c }, CalibrationMismatch},
		} {
			for _, snr := range []float64{45, 80} {
				for trial := range trials {
					rms := p.unit.peak(p.in) / decibels(snr)
					req := noisy(instead(measured(p.unit, p.in, frequencies), p.in, c.y), rms, rng)
					if trial%2 == 0 {
						req.NoiseRMS = rms
						req.Expected = Expected{p.unit.fs, 0.8 * p.unit.r1, 1.2 * p.unit.l1, p.unit.c0}
					}
					if trial%4 == 1 {
						req.Sweep.Re[100] += p.unit.peak(p.in)
						req.Sweep.Re[300] += p.unit.peak(p.in)
					}
					var f Fitter
					var est Estimate
					if f.Fit(req, &est); est.State != c.want || est.Detail == "" {
						t.Errorf("%s, %s at %g dB: %s %q, want %s", p.name, c.name, snr, est.State, est.Detail, c.want)
					}
				}
			}
		}
	}
}

// TestOutside: a resonance beyond the edge of the sweep is answered with where it is, as well as its tail tells; within half a bandwidth of the
// edge it is still found; far out, the expected inductance and capacitance tell the distance and the side.
func TestOutside(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 60
	if testing.Short() {
		trials = 15
	}
	for _, p := range parts() {
		bw := p.unit.bandwidth(p.in)
		for _, c := range []struct {
			beyond float64 // of the upper edge, in bandwidths
			want   State
		}{{-1, Found}, {0, Found}, {0.3, Found}, {0.7, OutsideSweep}, {1, OutsideSweep}, {2, OutsideSweep}, {5, OutsideSweep}, {30, OutsideSweep}} {
			frequencies := grid(p.unit.fs-5*bw-c.beyond*bw, 5*bw, 401)
			clean := measured(p.unit, p.in, frequencies)
			rms := p.unit.peak(p.in) / decibels(60)
			limit := bound(p.unit, p.in, frequencies, rms, settledSample(frequencies))
			var f Fitter
			var est Estimate
			var squares float64
			covered := 0
			for range trials {
				req := noisy(clean, rms, rng)
				req.Expected = Expected{p.unit.fs, 0.8 * p.unit.r1, 1.2 * p.unit.l1, p.unit.c0}
				f.Fit(req, &est)
				// The tail of a unit of low figure of merit, far out, does not stand out of its own C0.
				silent := c.beyond > 10 && p.unit.c0 > 1e3*p.unit.c1() && est.State == NoResonance
				if !silent && est.State != c.want || est.State != Found && est.Detail == "" {
					t.Errorf("%s, %g bandwidths beyond the edge: %s %q, want %s", p.name, c.beyond, est.State, est.Detail, c.want)
				}
				off := est.Value[ResonanceHz] - p.unit.fs
				if c.beyond > 10 {
					off = est.Quality.LoadedResonanceHz - p.unit.fs
					// Where the noise leaves the distance open it is what the expected unit makes of the slope, or left out.
					if v := est.Quality.LoadedResonanceHz; v != 0 && (v < frequencies[400] || math.Abs(off) > 50*bw) {
						t.Errorf("%s, %g bandwidths beyond the edge: off by %.1f bandwidths", p.name, c.beyond, off/bw)
					}
					continue
				}
				squares += off * off
				if math.Abs(off) <= 1.959964*math.Sqrt(est.Statistical[ResonanceHz][ResonanceHz]) {
					covered++
				}
			}
			if c.beyond > 10 {
				continue
			}
			n := float64(trials)
			if ratio := math.Sqrt(squares/n) / limit[0]; math.Abs(ratio-1) > 0.1+4/math.Sqrt(2*n) {
				t.Errorf("%s, %g bandwidths beyond the edge: rms error of fs %.2f times the bound", p.name, c.beyond, ratio)
			}
			if cover := float64(covered) / n; cover < 0.95-0.02-5*math.Sqrt(0.95*0.05/n) {
				t.Errorf("%s, %g bandwidths beyond the edge: coverage %.2f", p.name, c.beyond, cover)
			}
		}
	}
}

// TestTooNoisy: a unit that is seen but cannot be told, and noise that would hide the expected one.
func TestTooNoisy(t *testing.T) {
	rng := random(t, rand.Uint64())
	for _, p := range parts() {
		bw := p.unit.bandwidth(p.in)
		var f Fitter
		var est Estimate
		// The window sees the top of the resonance only, and badly.
		frequencies := grid(p.unit.fs, 0.3*bw, 9)
		req := noisy(measured(p.unit, p.in, frequencies), p.unit.peak(p.in)/decibels(8), rng)
		req.Expected = Expected{p.unit.fs, p.unit.r1, p.unit.l1, p.unit.c0}
		if f.Fit(req, &est); est.State == Found {
			t.Errorf("%s, 9 points in a narrow window at 8 dB: %s %+v", p.name, est.State, est.Statistical)
		}
		frequencies = grid(p.unit.fs, 5*bw, 401)
		req = noisy(measured(p.unit, p.in, frequencies), p.unit.peak(p.in)*10, rng)
		req.Expected = Expected{p.unit.fs, p.unit.r1, p.unit.l1, p.unit.c0}
		if f.Fit(req, &est); est.State != TooNoisy {
			t.Errorf("%s at -20 dB: %s %s", p.name, est.State, est.Detail)
		}
	}
}

// TestStrangeSamples: samples that are not those of a crystal unit in this network.
func TestStrangeSamples(t *testing.T) {
	rng := random(t, rand.Uint64())
	p := parts()[2]
	bw := p.unit.bandwidth(p.in)
	frequencies := grid(p.unit.fs, 5*bw, 401)
	rms := p.unit.peak(p.in) / decibels(60)
	fitted := func(change func(i int, v complex128) complex128, noise float64) Estimate {
		req := measured(p.unit, p.in, frequencies)
		for i := range frequencies {
			v := change(i, complex(req.Sweep.Re[i], req.Sweep.Im[i]))
			req.Sweep.Re[i], req.Sweep.Im[i] = real(v), imag(v)
		}
		req = noisy(req, rms, rng)
		req.NoiseRMS = noise
		var f Fitter
		var est Estimate
		f.Fit(req, &est)
		return est
	}
	for _, c := range []struct {
		name   string
		change func(i int, v complex128) complex128
		noise  float64
		want   State
	}{
		{"gain of another calibration", func(_ int, v complex128) complex128 { return 3 * v }, rms, CalibrationMismatch},
		{"phase of the source at random", func(_ int, v complex128) complex128 {
			sin, cos := math.Sincos(2 * math.Pi * rng.Float64())
			return v * complex(cos, sin)
		}, rms, Misfit},
		{"two units 6 bandwidths apart", func(i int, v complex128) complex128 {
			other := p.unit
			other.fs += 3 * bw
			return p.in.sample(p.unit.admittance(frequencies[i]) + other.admittance(frequencies[i]))
		}, 0, Misfit},
	} {
		if est := fitted(c.change, c.noise); est.State != c.want || est.Detail == "" {
			t.Errorf("%s: %s %q, want %s", c.name, est.State, est.Detail, c.want)
		}
	}
}
