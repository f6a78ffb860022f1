package resonance

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"example.com/admit/service/network"
)

// TestTurnedAgainstCalibration: a turn that the stated drift does not cover is a calibration that no longer holds, in any network that lets it
// be told; one that it does cover is fitted, and the sweep keeps at least the uncertainty that it would have without.
func TestTurnedAgainstCalibration(t *testing.T) {
	rng := random(t, rand.Uint64())
	const degree = math.Pi / 180
	for _, p := range parts() {
		frequencies := grid(p.unit.fs, 5*p.unit.bandwidth(p.in), 401)
		fit := func(turn, drift float64) Estimate {
			req := noisy(measured(p.unit, off(p.in, "phase", turn), frequencies), p.unit.peak(p.in)/decibels(80), rng)
			req.Terms = p.in.terms(len(frequencies))
			if drift > 0 {
				changed := off(p.in, "phase", drift).terms(len(frequencies))
				req.Contributions = []network.Contribution{{Name: network.InfluencePhaseDrift, Terms: *changed}}
			}
			var f Fitter
			var est Estimate
			f.Fit(req, &est)
			return est
		}
		for _, c := range []struct {
			turn, drift float64 // degrees
			want        State
			words       string
		}{
			{0, 0.1, Found, ""},
			{0.3, 0.1, Found, ""},
			{1, 0.1, CalibrationMismatch, "turned by "},
			{-5, 0.1, CalibrationMismatch, "turned by " + minus},
			{10, 0.1, CalibrationMismatch, "0.1°"},
			{3, 1, Found, ""},
			{3, 0, Found, ""}, // nothing is stated that it could be held against
		} {
			est := fit(c.turn*degree, c.drift*degree)
			if est.State != c.want || !strings.Contains(est.Detail, c.words) {
				t.Errorf("%s turned by %g degrees, drift %g: %s %q, want %s", p.name, c.turn, c.drift, est.State, est.Detail, c.want)
			}
		}
		still, turned := fit(0, 0.1*degree), fit(0.3*degree, 0.1*degree)
		if !turned.Fitted[PhaseRad] || still.Fitted[PhaseRad] {
			t.Fatalf("%s: free phase fitted %v and %v", p.name, still.Fitted[PhaseRad], turned.Fitted[PhaseRad])
		}
		for _, k := range []Parameter{ResonanceHz, LogResistance, ShuntCapacitanceFarad} {
			a, b := still.Systematic[0].Shift[k], turned.Systematic[0].Shift[k]
			if math.Abs(a-b) > 0.02*math.Abs(a)+1e-3*math.Sqrt(still.Statistical[k][k]) {
				t.Errorf("%s, parameter %d: the drift's share is %g without a turn and %g with one", p.name, k, a, b)
			}
		}
	}
}
