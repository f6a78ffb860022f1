package resonance

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"example.com/admit/service/sweep"
)

// TestFitExact: without noise every network gives back the unit it was given, to the rounding of the samples.
func TestFitExact(t *testing.T) {
	var f Fitter
	var est Estimate
	for _, p := range parts() {
		for _, in := range []fixture{p.in, reflection, admittances, impedances, {"rotated", 0.1i, -30 + 20i, 60 - 25i, 1, sweep.S11}} {
			bw := p.unit.bandwidth(in)
			grids := [][]float64{grid(p.unit.fs, 5*bw, 401), grid(p.unit.fs+2*bw, 3*bw, 13), grid(p.unit.fs, 300*bw, 6401)}
			if testing.Short() {
				grids = grids[:2]
			}
			for _, frequencies := range grids {
				slices.Reverse(frequencies)
				f.Fit(measured(p.unit, in, frequencies), &est)
				m := est.Unit().Modes[0]
				if in.d == 1 {
					y0 := complex(0, 2*math.Pi*p.unit.fs*p.unit.c0)
					centre := p.unit.fs - imag(in.c/(1+in.c*y0))/(4*math.Pi*p.unit.l1)
					q := est.Quality
					if math.Abs(q.LoadedResonanceHz-centre) > 1e-3*bw || math.Abs(q.LoadedBandwidthHz/bw-1) > 1e-3 {
						t.Errorf("%s in %s: loaded resonance off by %g bandwidths, width %g of what it is", p.name, in.name, (q.LoadedResonanceHz-centre)/bw, q.LoadedBandwidthHz/bw)
					}
				}
				if est.State != Found || math.Abs(m.ResonanceHz-p.unit.fs) > 1e-8*bw ||
					math.Abs(m.ResistanceOhm/p.unit.r1-1) > 1e-8 || math.Abs(m.InductanceHenry/p.unit.l1-1) > 1e-8 ||
					math.Abs(est.Value[ShuntCapacitanceFarad]/p.unit.c0-1) > 1e-7 {
					t.Errorf("%s in %s, %d points: %s %s, fs off by %g, R1 %g, L1 %g, C0 %g", p.name, in.name, len(frequencies), est.State, est.Detail,
						m.ResonanceHz-p.unit.fs, m.ResistanceOhm/p.unit.r1-1, m.InductanceHenry/p.unit.l1-1, est.Value[ShuntCapacitanceFarad]/p.unit.c0-1)
				}
			}
		}
	}
}

// TestFitRange: units of any frequency from 10 kHz to 200 MHz, Q from 500 to 3 million and M from 1 up, in any network, on grids from 9 points up
// that need not be centred, come out with errors that their own covariance describes.
func TestFitRange(t *testing.T) {
	rng := random(t, rand.Uint64())
	var f Fitter
	var est Estimate
	var squares [5]float64
	found, tried := 0, 0
	for tried < 1500 {
		fs := 10e3 * math.Exp(rng.Float64()*math.Log(200e6/10e3))
		q := 500 * math.Exp(rng.Float64()*math.Log(3e6/500))
		in := []fixture{piNetwork, seriesThrough, reflection, highImpedance, admittances}[rng.IntN(5)]
		merit := math.Exp(rng.Float64() * math.Log(500))
		z0 := 50.0
		if in.c != 0 {
			z0 = real(in.c)
		}
		r1 := z0 * math.Exp(rng.Float64()*math.Log(30)-math.Log(10))
		u := truth{fs: fs, r1: r1, l1: q * r1 / (2 * math.Pi * fs), c0: 1 / (2 * math.Pi * fs * merit * r1)}
		bw := u.bandwidth(in)
		points := 9 + rng.IntN(400)
		span := 0.5 + 10*rng.Float64()
		if q*fs > 1.6e13 || bw > 0.02*fs || 2*span > 0.7*float64(points-1) {
			continue // no such quartz, no longer one resonance, or fewer points than a coarse grid has
		}
		tried++
		frequencies := grid(fs+bw*span*(rng.Float64()-0.5), span*bw, points)
		if rng.IntN(2) == 0 {
			slices.Reverse(frequencies)
		}
		rms := u.peak(in) / decibels(40+40*rng.Float64())
		req := noisy(measured(u, in, frequencies), rms, rng)
		if rng.IntN(2) == 0 {
			req.NoiseRMS = rms
		}
		f.Fit(req, &est)
		if est.State != Found {
			t.Errorf("%s, fs %.4g, Q %.3g, M %.3g, R1 %.3g, %d points over +-%.2f bandwidths: %s %s", in.name, fs, q, merit, r1, points, span, est.State, est.Detail)
			continue
		}
		found++
		e, sd := errorsOf(&est, u)
		for k := range e {
			squares[k] += e[k] * e[k] / (sd[k] * sd[k])
			// Few points and a variance estimated from them have long tails.
			if math.Abs(e[k]) > 6*sd[k] {
				t.Errorf("%s, fs %.4g, Q %.3g, M %.3g, %d points: quantity %d off by %.1f standard deviations", in.name, fs, q, merit, points, k, e[k]/sd[k])
			}
		}
	}
	for k, s := range squares {
		if mean := s / float64(found); mean < 0.8 || mean > 1.25 {
			t.Errorf("quantity %d: mean square of error over standard deviation %.3f", k, mean)
		}
	}
}

// TestGridRestoresFrequencies: files print rounded frequencies; where the grid is given the fit uses its points.
func TestGridRestoresFrequencies(t *testing.T) {
	p := parts()[2]
	bw := p.unit.bandwidth(p.in)
	g := sweep.Grid{StartHz: math.Round(p.unit.fs - 5*bw), StopHz: math.Round(p.unit.fs + 5*bw), Points: 401}
	frequencies := make([]float64, g.Points)
	for i := range frequencies {
		frequencies[i] = g.At(i)
	}
	req := measured(p.unit, p.in, frequencies)
	for i, f := range frequencies {
		req.Sweep.FrequencyHz[i] = 10 * math.Round(f/10)
	}
	var f Fitter
	var rounded, restored Estimate
	f.Fit(req, &rounded)
	req.Sweep.Grid = &g
	f.Fit(req, &restored)
	if off := math.Abs(restored.Value[ResonanceHz] - p.unit.fs); off > 1e-6 {
		t.Errorf("with the grid fs is off by %g Hz", off)
	}
	if off := math.Abs(rounded.Value[ResonanceHz] - p.unit.fs); off < 1e-3 {
		t.Errorf("rounded frequencies leave fs within %g Hz: the test shows nothing", off)
	}
}

// TestClockOffset: true frequency = stated frequency x (1 + offset), and its uncertainty is an influence on fs alone.
func TestClockOffset(t *testing.T) {
	p := parts()[1]
	req := measured(p.unit, p.in, grid(p.unit.fs, 5*p.unit.bandwidth(p.in), 401))
	const offset = 3e-6
	for i := range req.Sweep.FrequencyHz {
		req.Sweep.FrequencyHz[i] /= 1 + offset
	}
	req.ClockOffset, req.ClockUncertainty = offset, 2e-8
	var f Fitter
	var est Estimate
	f.Fit(req, &est)
	if off := math.Abs(est.Value[ResonanceHz] - p.unit.fs); off > 1e-6 {
		t.Errorf("fs off by %g Hz", off)
	}
	want := 2e-8 * p.unit.fs
	if len(est.Systematic) != 1 || est.Systematic[0].Name != ClockInfluence || math.Abs(est.Systematic[0].Shift[ResonanceHz]/want-1) > 1e-9 {
		t.Errorf("influences %+v, want %s of %g Hz", est.Systematic, ClockInfluence, want)
	}
}

// TestUnsuitable: requests that a caller should not have made are answered in words.
func TestUnsuitable(t *testing.T) {
	p := parts()[1]
	good := func() *Request { return measured(p.unit, p.in, grid(p.unit.fs, 1000, 21)) }
	for name, spoil := range map[string]func(*Request){
		"few points":     func(r *Request) { r.Sweep.FrequencyHz = r.Sweep.FrequencyHz[:8] },
		"no samples":     func(r *Request) { r.Sweep.Re = nil },
		"no terms":       func(r *Request) { r.Terms = nil },
		"other terms":    func(r *Request) { r.Terms = p.in.terms(20) },
		"strange terms":  func(r *Request) { r.Terms.D = 2 },
		"no span":        func(r *Request) { r.Sweep.FrequencyHz = make([]float64, 21) },
		"grid too small": func(r *Request) { r.Sweep.Grid = &sweep.Grid{StartHz: 1, StopHz: 2, Points: 20} },
	} {
		req := good()
		spoil(req)
		var f Fitter
		var est Estimate
		f.Fit(req, &est)
		if est.State != Misfit || est.Detail == "" {
			t.Errorf("%s: %s %q", name, est.State, est.Detail)
		}
	}
}
