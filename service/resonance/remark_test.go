package resonance

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

// TestAnotherArm: a second arm of 1 kohm a few kilohertz beside a 25 MHz unit is no noise, and neither is one of 3 kohm: the first is a misfit, the
// second is found with a remark, and a clean unit is found without one.
func TestAnotherArm(t *testing.T) {
	rng := random(t, rand.Uint64())
	p := parts()[2]
	bw := p.unit.bandwidth(p.in)
	for _, c := range []struct {
		ohm, aboveHz float64
		want         State
		words        string
	}{
		{1000, 2000, Misfit, "systematic"},
		{1000, 4000, Misfit, "systematic"},
		{3000, 2000, Found, "Another response may lie nearby"},
		{3000, 4000, Found, "Another response may lie nearby"},
		{1e9, 2000, Found, ""},
	} {
		for _, span := range []float64{5, 10} {
			req := measured(p.unit, p.in, grid(p.unit.fs, span*bw, 401))
			second := truth{fs: p.unit.fs + c.aboveHz, r1: c.ohm, l1: p.unit.l1 * (c.ohm + 25) / (p.unit.r1 + 25)}
			instead(req, p.in, func(f float64) complex128 { return p.unit.admittance(f) + second.admittance(f) })
			rms := p.unit.peak(p.in) / decibels(90)
			req = noisy(req, rms, rng)
			req.NoiseRMS = rms
			var f Fitter
			var est Estimate
			f.Fit(req, &est)
			if est.State != c.want || !strings.Contains(est.Detail, c.words) || c.words == "" && est.Detail != "" {
				t.Errorf("%g ohm %g Hz above, over %g bandwidths: %s %q, want %s", c.ohm, c.aboveHz, span, est.State, est.Detail, c.want)
			}
		}
	}
}

// TestStatedNoiseIsHeldAgainstTheSamples: the ratio claimed is that of the larger noise, and a stated noise that is far off is named.
func TestStatedNoiseIsHeldAgainstTheSamples(t *testing.T) {
	rng := random(t, rand.Uint64())
	for _, p := range parts() {
		clean := measured(p.unit, p.in, grid(p.unit.fs, 5*p.unit.bandwidth(p.in), 401))
		for _, c := range []struct {
			snr, stated float64 // dB
			words       string
		}{
			{70, 70, ""},
			{70, 160, "times more than the stated noise"},
			{70, 80, "times more than the stated noise"},
			{70, 50, "times less than the stated noise"},
			{70, 71, ""},
		} {
			req := noisy(clean, p.unit.peak(p.in)/decibels(c.snr), rng)
			req.NoiseRMS = p.unit.peak(p.in) / decibels(c.stated)
			var f Fitter
			var est Estimate
			f.Fit(req, &est)
			if est.State != Found || !strings.Contains(est.Detail, c.words) || c.words == "" && est.Detail != "" {
				t.Errorf("%s, %g dB stated as %g dB: %s %q", p.name, c.snr, c.stated, est.State, est.Detail)
			}
			if off := est.Quality.SNRDecibel - math.Min(c.snr, c.stated); math.Abs(off) > 1 {
				t.Errorf("%s, %g dB stated as %g dB: %.1f dB claimed", p.name, c.snr, c.stated, est.Quality.SNRDecibel)
			}
		}
		var f Fitter
		var est Estimate
		if f.Fit(clean, &est); est.Quality.SNRDecibel > 160 {
			t.Errorf("%s without noise: %.0f dB claimed", p.name, est.Quality.SNRDecibel)
		}
	}
}
