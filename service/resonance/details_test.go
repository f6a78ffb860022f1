package resonance

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

// TestAdmittanceCalledImpedance: samples of another quantity than stated are named as that, not as a resonance elsewhere.
func TestAdmittanceCalledImpedance(t *testing.T) {
	rng := random(t, rand.Uint64())
	p := parts()[2]
	for _, c := range []struct{ taken, called fixture }{{admittances, impedances}, {impedances, admittances}} {
		req := measured(p.unit, c.taken, grid(p.unit.fs+15e3, 40e3, 801))
		req = noisy(req, p.unit.peak(c.taken)/decibels(70), rng)
		req.Sweep.Quantity, req.Terms = c.called.q, c.called.terms(801)
		var f Fitter
		var est Estimate
		if f.Fit(req, &est); est.State != Misfit || !strings.Contains(est.Detail, "another quantity") || est.Value != [Parameters]float64{} {
			t.Errorf("%s called %s: %s %q", c.taken.name, c.called.name, est.State, est.Detail)
		}
	}
}

// TestTailWithoutCircuit: where the tail of a resonance tells about where it lies but not its resistance, no circuit is given, and the words are
// for a person.
func TestTailWithoutCircuit(t *testing.T) {
	rng := random(t, rand.Uint64())
	p := parts()[2]
	vague := 0
	for range 40 {
		req := noisy(measured(p.unit, p.in, grid(24.925e6, 25e3, 101)), 2e-5, rng)
		req.NoiseRMS = 2e-5
		var f Fitter
		var est Estimate
		f.Fit(req, &est)
		if strings.Contains(est.Detail, "e+") || strings.Contains(est.Detail, "e-0") {
			t.Errorf("%q", est.Detail)
		}
		if u := deviation(&est, LogResistance); u > 0.5 {
			t.Errorf("%s, R1 is given with u(ln R1) = %g", est.State, u)
		}
		if est.State == OutsideSweep && est.Value[ResonanceHz] == 0 {
			vague++
		}
	}
	if vague == 0 {
		t.Error("the tail always told the circuit: the test shows nothing")
	}
}

// TestWordsForAnOperator: what is said of a contact head without a unit, of a dead unit, and of a sweep too coarse to see a good one.
func TestWordsForAnOperator(t *testing.T) {
	rng := random(t, rand.Uint64())
	p := parts()[2]
	susceptance := func(farad float64) func(f float64) complex128 {
		return func(f float64) complex128 { return complex(0, 2*math.Pi*f*farad) }
	}
	unit := Expected{p.unit.fs, p.unit.r1, p.unit.l1, p.unit.c0}
	for _, c := range []struct {
		name           string
		y              func(f float64) complex128
		middle, half   float64
		points         int
		expected       Expected
		words, without string
	}{
		{"empty", susceptance(-0.002e-12), p.unit.fs, 5e3, 401, Expected{}, "nothing in the contact head: less than 10 fF", minus},
		{"nearly empty", susceptance(0.043e-12), p.unit.fs, 5e3, 401, Expected{}, "less than 50 fF", "open"},
		{"dead unit", susceptance(p.unit.c0), p.unit.fs, 5e3, 401, Expected{}, "1.6 pF and nothing else", "conductance"},
		{"lossy dead unit", func(f float64) complex128 { return 1e-4 + susceptance(p.unit.c0)(f) }, p.unit.fs, 5e3, 401, Expected{}, "a conductance of ", "apart"},
		{"coarse", p.unit.admittance, 25e6, 1e6, 401, Expected{}, "lie 5 kHz apart, a resonance narrower than 10 kHz", "conductance"},
		{"coarse, unit expected", p.unit.admittance, 25e6, 1e6, 401, unit, "lie 5 kHz apart, a resonance narrower than 10 kHz", "e+"},
	} {
		req := instead(measured(p.unit, p.in, grid(c.middle, c.half, c.points)), p.in, c.y)
		req = noisy(req, 1e-6, rng)
		req.NoiseRMS, req.Expected = 1e-6, c.expected
		var f Fitter
		var est Estimate
		f.Fit(req, &est)
		if !strings.Contains(est.Detail, c.words) || strings.Contains(est.Detail, c.without) {
			t.Errorf("%s: %s %q, want %q and not %q", c.name, est.State, est.Detail, c.words, c.without)
		}
	}
	// In an unknown network too.
	req := noisy(measured(p.unit, p.in, grid(25e6, 1e6, 401)), 1e-5, rng)
	req.Terms, req.ScaleUnknown = nil, true
	var f Fitter
	var est Estimate
	if f.Fit(req, &est); est.State != NoResonance || !strings.Contains(est.Detail, "apart") {
		t.Errorf("unknown network: %s %q", est.State, est.Detail)
	}
}
