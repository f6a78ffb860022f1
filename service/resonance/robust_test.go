package resonance

import (
	"math"
	"math/rand/v2"
	"testing"
)

// TestNoneLost: no fit ends more than a loaded bandwidth from the truth, at 5 dB a point, with 1 % of the points wild by half the peak, on coarse
// and on wide grids; and what is found is as good as the bound allows, but for what wild points cost. One trial in some ten thousand has wild
// points side by side, three times over: those are not told from something systematic, and the answer says by its uncertainty that it is
// vague. It does not count here, and there may be one of them.
func TestNoneLost(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 120
	if testing.Short() {
		trials = 40
	}
	rice := newRiceTable()
	for _, c := range []struct {
		name                string
		snr, wild           float64
		points              int
		halfSpan, most      float64 // in bandwidths; largest ratio of the rms error of fs to the bound
		expected, magnitude bool
	}{
		{name: "5 dB", snr: 5, points: 401, halfSpan: 5, most: 1.05},
		{name: "5 dB, unit expected", snr: 5, points: 401, halfSpan: 5, most: 1.05, expected: true},
		{name: "1 % wild at 50 dB", snr: 50, wild: 0.01, points: 401, halfSpan: 5, most: 1.15},
		{name: "1 % wild at 30 dB", snr: 30, wild: 0.01, points: 401, halfSpan: 5, most: 1.15},
		{name: "13 points", snr: 40, points: 13, halfSpan: 4.2, most: 1.05},
		{name: "9 points", snr: 40, points: 9, halfSpan: 2, most: 1.05},
		{name: "2 points a bandwidth", snr: 40, points: 401, halfSpan: 100, most: 1.05},
		{name: "magnitudes at 20 dB", snr: 20, points: 401, halfSpan: 5, most: 1.1, magnitude: true},
		{name: "magnitudes, 1 % wild at 50 dB", snr: 50, wild: 0.01, points: 401, halfSpan: 5, most: 1.25, magnitude: true},
	} {
		for _, p := range parts() {
			bw := p.unit.bandwidth(p.in)
			frequencies := grid(p.unit.fs+0.3*c.halfSpan*bw, c.halfSpan*bw, c.points)
			clean := measured(p.unit, p.in, frequencies)
			peak := p.unit.peak(p.in)
			rms := peak / decibels(c.snr)
			limit := bound(p.unit, p.in, frequencies, rms, settledSample(frequencies))[0]
			if c.magnitude {
				limit = rice.bound(p.unit, p.in, frequencies, rms)[0]
			}
			var f Fitter
			var est Estimate
			var squares float64
			vague := 0
			for range trials {
				req := noisy(clean, rms, rng)
				for i := range req.Sweep.Re {
					if rng.Float64() < c.wild {
						sin, cos := math.Sincos(rng.Float64() * 2 * math.Pi)
						req.Sweep.Re[i] += peak / 2 * cos
						req.Sweep.Im[i] += peak / 2 * sin
					}
				}
				if c.expected {
					req.Expected = Expected{p.unit.fs, 0.8 * p.unit.r1, 1.2 * p.unit.l1, p.unit.c0}
				}
				if c.magnitude {
					req = magnitudes(req)
				}
				f.Fit(req, &est)
				off := est.Value[ResonanceHz] - p.unit.fs
				if est.State != Found || !(math.Abs(off) < bw) {
					t.Errorf("%s, %s: lost, %s %s, fs off by %g bandwidths", c.name, p.name, est.State, est.Detail, off/bw)
				}
				if u := math.Sqrt(est.Statistical[ResonanceHz][ResonanceHz]); u > 5*limit && math.Abs(off) < 3*u {
					vague++
					continue
				}
				squares += off * off
			}
			if vague > 1 {
				t.Errorf("%s, %s: %d of %d answers are vague", c.name, p.name, vague, trials)
			}
			if ratio := math.Sqrt(squares/float64(trials)) / limit; ratio > c.most+5/math.Sqrt(2*float64(trials)) {
				t.Errorf("%s, %s: rms error of fs %.2f times the bound", c.name, p.name, ratio)
			}
		}
	}
}

// TestWildPointsAreCounted: what is thrown out is said.
func TestWildPointsAreCounted(t *testing.T) {
	p := parts()[2]
	req := noisy(measured(p.unit, p.in, grid(p.unit.fs, 5*p.unit.bandwidth(p.in), 401)), p.unit.peak(p.in)/300, random(t, rand.Uint64()))
	for _, i := range []int{20, 200, 333} {
		req.Sweep.Re[i] += p.unit.peak(p.in) / 2
	}
	var f Fitter
	var est Estimate
	f.Fit(req, &est)
	if est.State != Found || est.Quality.WildPoints != 3 {
		t.Errorf("%s, %d wild points, want 3", est.State, est.Quality.WildPoints)
	}
}

// TestSecondMode: an unwanted mode two bandwidths away is not described by one mode. Where it matters the answer is a misfit; where it is weak
// the uncertainty covers what it does. A mode as strong as the noise of a point is the worst case, and gets more trials: it moves fs by a few
// standard deviations and can hardly be seen from point to point.
func TestSecondMode(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 60
	if testing.Short() {
		trials = 10
	}
	for _, p := range []part{parts()[1], parts()[2], parts()[4]} {
		bw := p.unit.bandwidth(p.in)
		frequencies := grid(p.unit.fs, 5*bw, 401)
		z := real(p.in.c)
		for _, db := range []float64{3, 6, 10, 20, 30, 40, 50, 60} {
			r2 := (p.unit.r1+z)*decibels(db) - z
			second := truth{fs: p.unit.fs + 2*bw, r1: r2, l1: p.unit.l1 * (r2 + z) / (p.unit.r1 + z)}
			req := measured(p.unit, p.in, frequencies)
			for i, f := range frequencies {
				v := p.in.sample(p.unit.admittance(f) + second.admittance(f))
				req.Sweep.Re[i], req.Sweep.Im[i] = real(v), imag(v)
			}
			for _, snr := range []float64{50, 70} {
				wrong, trials, share := 0, trials, 0.05
				if db == snr {
					trials, share = 5*trials, 0.03
				}
				for range trials {
					var f Fitter
					var est Estimate
					f.Fit(noisy(req, p.unit.peak(p.in)/decibels(snr), rng), &est)
					if db <= 10 && est.State != Misfit || db >= 30 && est.State != Found {
						t.Errorf("%s, %g dB down at %g dB: %s %s", p.name, db, snr, est.State, est.Detail)
					}
					e, sd := errorsOf(&est, p.unit)
					if est.State == Found && (math.Abs(e[0]) > 3*sd[0] || math.Abs(e[1]) > 3*sd[1]) {
						wrong++
					}
				}
				if float64(wrong) > share*float64(trials)+2 {
					t.Errorf("%s, %g dB down at %g dB: %d of %d found and wrong by more than three standard uncertainties", p.name, db, snr, wrong, trials)
				}
			}
		}
	}
}
