package survey

import (
	"math"
	"testing"

	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// A stepped survey that does not wait for the modes to settle finds them all the same: six modes from 3 to 50 dB, one step to a width, 1626 points,
// dwell 1, 0.2 and 0.05 of the time constant.
func TestFastSurvey(t *testing.T) {
	rng := random(t)
	n, plain := piNetwork, tenMegahertz()
	main := plain.modes[0]
	f := grid(9.98e6, 10.24e6, 1626)
	const width = 160.0
	decibel := []float64{3, 10, 20, 30, 40, 50}
	trials := 8
	ratios := []float64{1, 0.2, 0.05}
	if testing.Short() {
		trials, ratios = 1, []float64{0.2}
	}
	var v Surveyor
	var out Result
	falseModes, surveys, within, all := 0, 0, 0, 0
	for _, ratio := range ratios {
		for _, snr := range []float64{60, 80} {
			u := plain
			u.modes = append([]branch(nil), plain.modes...)
			for k, d := range decibel {
				u.modes = append(u.modes, unwanted(main, n, 10.03e6+float64(k)*31e3+1e3*rng.Float64(), d, width))
			}
			dwell := math.Round(ratio/(math.Pi*width)*1e9) / 1e9
			clean := ringing(u, n, f, dwell, dwell/2)
			for range trials {
				req := noisy(clean, u.peak(n)*decibels(-snr), rng)
				v.Survey(req, &out)
				surveys++
				if out.State != resonance.Found || !out.Quality.Memory {
					t.Fatalf("dwell %g time constants, %g dB: %s %s", ratio, snr, out.State, out.Detail)
				}
				seen := 0
				for _, m := range out.Modes {
					if m.Kind == MainMode {
						if math.Abs(m.FrequencyHz.Value-10e6) > 4.5*m.FrequencyHz.StandardUncertainty() {
							t.Errorf("dwell %g time constants: fs %.3f Hz +- %.3f", ratio, m.FrequencyHz.Value, m.FrequencyHz.StandardUncertainty())
						}
						continue
					}
					known := false
					for k, d := range decibel {
						if math.Abs(m.FrequencyHz.Value-u.modes[k+1].fs) > 2*width {
							continue
						}
						known = true
						seen++
						if s := m.Suppression[PiNetworkTransmission]; snr > 70 || d < 35 { // not helped over the threshold by noise
							all++
							if math.Abs(s.Value-d) < 1.96*s.StandardUncertainty() {
								within++
							}
						}
					}
					if !known {
						falseModes++
					}
				}
				if least := 5; seen < least || snr > 70 && seen < 6 {
					t.Errorf("dwell %g time constants, %g dB: %d of 6 modes found", ratio, snr, seen)
				}
			}
		}
	}
	share := float64(within) / float64(all)
	t.Logf("%d false modes in %d surveys; %.3f of %d suppressions within 1.96 u", falseModes, surveys, share, all)
	if falseModes > 1 {
		t.Errorf("%d false modes in %d surveys", falseModes, surveys)
	}
	if share < 0.95-3.5*math.Sqrt(0.05*0.95/float64(all))-0.01 {
		t.Errorf("%.3f of %d suppressions within their 95 %% interval", share, all)
	}
}

// Where nobody stated that the phase goes on, the samples may say so.
func TestFastSurveyUnstated(t *testing.T) {
	rng := random(t)
	u, f := crowd(piNetwork)
	req := noisy(ringing(u, piNetwork, f, 150e-6, 75e-6), u.peak(piNetwork)*decibels(-60), rng)
	req.Sweep.Timing.Phase = sweep.PhaseUnstated
	req.FalseAlarmRate = 1e-4
	var v Surveyor
	var out Result
	v.Survey(req, &out)
	agree(t, "unstated", &out, u)
	if !out.Quality.Memory {
		t.Error("no memory in the model")
	}
}

// A dwell that is not quite as stated is found from the samples where they ask for it.
func TestFastSurveyWrongTiming(t *testing.T) {
	rng := random(t)
	u, f := crowd(piNetwork)
	req := noisy(ringing(u, piNetwork, f, 150e-6, 75e-6), u.peak(piNetwork)*decibels(-70), rng)
	req.Sweep.Timing.Dwell, req.Sweep.Timing.Averaging = 147_000, 73_500
	req.FalseAlarmRate = 1e-4
	var v Surveyor
	var out Result
	v.Survey(req, &out)
	agree(t, "wrong timing", &out, u)
	if math.Abs(out.Quality.DwellSeconds/150e-6-1) > 1e-3 {
		t.Errorf("dwell %g s, want 150 us", out.Quality.DwellSeconds)
	}
}
