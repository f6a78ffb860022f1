package resonance

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

// loadedBy returns centre and Q of the resonator as the network loads it, in the test's own words.
func (u truth) loadedBy(n fixture) (centreHz, quality float64) {
	y0 := complex(u.g0, 2*math.Pi*u.fs*u.c0)
	seen := n.c / (1 + n.c*y0)
	centreHz = u.fs - imag(seen)/(4*math.Pi*u.l1)
	return centreHz, 2 * math.Pi * centreHz * u.l1 / (u.r1 + real(seen))
}

// TestMagnitudesOfUnknownNetwork: without phase and without the network, fs and Q are still those of the loaded resonator, with errors that
// their covariance describes, whatever leaks past the unit; where they are not, no number is given.
func TestMagnitudesOfUnknownNetwork(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 40
	if testing.Short() {
		trials = 20
	}
	for _, p := range parts() {
		bw := p.unit.bandwidth(p.in)
		frequencies := grid(p.unit.fs+bw, 5*bw, 401)
		centre, quality := p.unit.loadedBy(p.in)
		peak := p.unit.peak(p.in)
		for _, c := range []struct {
			name    string
			leakage complex128 // past the unit, in peaks
			snr     float64
		}{
			{"nothing else", 0, 60},
			{"noisy", 0, 30},
			{"a leakage in phase", 0.3, 60},
			{"a leakage in quadrature", 0.5i, 60},
			{"a leakage that takes it off", -0.8 + 0.1i, 60},
			{"strong leakage", 2 - 3i, 60},
			{"a dip to nothing", -1, 60},
		} {
			name := fmt.Sprintf("%s, %s", p.name, c.name)
			var squares [2]float64
			for trial := range trials {
				req := measured(p.unit, p.in, frequencies)
				for i := range req.Sweep.Re {
					v := complex(req.Sweep.Re[i], req.Sweep.Im[i]) + c.leakage*complex(peak, 0)
					req.Sweep.Re[i], req.Sweep.Im[i] = real(v), imag(v)
				}
				rms := peak / decibels(c.snr)
				req = magnitudes(noisy(req, rms, rng))
				req.Terms, req.ScaleUnknown = nil, true
				if trial%2 == 0 {
					req.NoiseRMS = rms
				}
				var f Fitter
				var est Estimate
				f.Fit(req, &est)
				if est.State != Found || est.Fitted[LogResistance] {
					t.Fatalf("%s: %s %q", name, est.State, est.Detail)
				}
				off := math.Log(est.Unit().Modes[0].QualityFactor() / quality)
				squares[0] += math.Pow((est.Value[ResonanceHz]-centre)/deviation(&est, ResonanceHz), 2)
				squares[1] += math.Pow(off/deviation(&est, LogInductance), 2)
			}
			// The mean of n squares of normal numbers scatters by sqrt(2/n): five of these above, and the same ratio below.
			most := 1 + 5*math.Sqrt(2/float64(trials))
			for k, s := range squares {
				if mean := s / float64(trials); mean > most || mean < 0.3/most {
					t.Errorf("%s: mean square of error over standard deviation %.2f of quantity %d", name, mean, k)
				}
			}
		}
	}
}

// TestUnknownNetworkIsAnInfluence: the stated frequency reaches the unit's own fs, which the noise alone does not, and the answer says what its Q
// is the Q of.
func TestUnknownNetworkIsAnInfluence(t *testing.T) {
	rng := random(t, rand.Uint64())
	for _, p := range parts() {
		bw := p.unit.bandwidth(p.in)
		for _, magnitude := range []bool{false, true} {
			req := noisy(measured(p.unit, p.in, grid(p.unit.fs, 5*bw, 401)), p.unit.peak(p.in)/decibels(80), rng)
			if magnitude {
				req = magnitudes(req)
			}
			req.Terms, req.ScaleUnknown = nil, true
			var f Fitter
			var est Estimate
			f.Fit(req, &est)
			d := Derive(&est, Conditions{})[MotionalResonance]
			off := math.Abs(d.Value - p.unit.fs)
			if u := d.StandardUncertainty(); est.State != Found || off > 2*u || u > bw {
				t.Errorf("%s: %s %q, fs off by %g Hz at a standard uncertainty of %g Hz", p.name, est.State, est.Detail, off, u)
			}
			share := 0.0
			for _, s := range est.Budget(nil, &d) {
				if s.Name == UnknownNetworkInfluence {
					share = s.StandardUncertainty
				}
			}
			if least := bw / 2 * math.Tan(10*math.Pi/180); share < 0.99*least {
				t.Errorf("%s: the unknown network has a share of %g Hz, at least %g Hz", p.name, share, least)
			}
			if !strings.Contains(est.Detail, "as the network loads it") {
				t.Errorf("%s: the loaded Q is not named: %q", p.name, est.Detail)
			}
		}
	}
}
