package survey

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"example.com/admit/service/sweep"
)

// anything builds a survey of a unit, a network, a grid, a timing and a noise that need not suit each other.
func anything(rng *rand.Rand) *Request {
	n := []fixture{piNetwork, skewNetwork, seriesThrough, reflection, admittances, impedances}[rng.IntN(6)]
	u := truth{c0: 1e-12 * math.Exp(2*rng.NormFloat64()), g0: math.Max(0, 1e-7*rng.NormFloat64())}
	width := math.Exp(4 + rng.NormFloat64())
	for range rng.IntN(6) {
		r, w := math.Exp(3.5+1.5*rng.NormFloat64()), width*math.Exp(0.7*rng.NormFloat64())
		u.modes = append(u.modes, branch{10e6 + width*40*(2*rng.Float64()-1), r, (r + real(n.c)) / (2 * math.Pi * w)})
	}
	points := []int{9, 12, 30, 101, 401}[rng.IntN(5)]
	span := width * math.Exp(1+4*rng.Float64())
	f := grid(10e6-span/2, 10e6+span/2, points)
	req := settled(u, n, f)
	dwell := math.Round(1e9*math.Exp(-3+3*rng.Float64())/width) / 1e9
	switch timing := rng.IntN(4); {
	case timing == 0 && n.d != 0 && n.c != 0 && len(u.modes) > 0:
		req = ringing(u, n, f, dwell, dwell/float64(1+rng.IntN(2)))
	case timing == 1:
		phase := []sweep.SourcePhase{sweep.PhaseUnstated, sweep.PhaseContinuous, sweep.PhaseRestarted}[rng.IntN(3)]
		req.Sweep.Timing = sweep.Timing{Dwell: time.Duration(dwell * 1e9), Phase: phase}
	}
	if rng.IntN(5) > 0 {
		req = noisy(req, 0.5*math.Exp(-3-8*rng.Float64()), rng)
	}
	if rng.IntN(4) == 0 {
		req.NoiseRMS = 0
	}
	if rng.IntN(4) == 0 {
		req.Sweep.Re[rng.IntN(points)] += 10
	}
	req.ScaleUnknown = rng.IntN(5) == 0 && n.d != 0
	req.ClockUncertainty = 1e-8
	return req
}

// Whatever comes, numbers come out: uncertainties may be infinite, nothing is NaN, and widths are positive.
func TestAnything(t *testing.T) {
	rng := random(t)
	trials := 400
	if testing.Short() {
		trials = 40
	}
	var v Surveyor
	var out Result
	for trial := range trials {
		v.Survey(anything(rng), &out)
		q := out.Quality
		numbers := []float64{
			q.SNRDecibel, q.NoiseRMS, q.ReducedChiSquare, q.ResidualCorrelation, q.ResidualOverPeak, q.SettlingTimeConstants, q.Threshold,
			out.ShuntCapacitanceFarad.Value, out.ShuntConductanceSiemens.Value, out.PhaseRad.Value,
		}
		uncertainties := []float64{out.ShuntCapacitanceFarad.StandardUncertainty()}
		for _, m := range out.Modes {
			numbers = append(numbers, m.FrequencyHz.Value, m.ResistanceOhm.Value, m.InductanceHenry.Value, m.LoadedWidthHz.Value, m.SupportPoints, m.Gain)
			uncertainties = append(uncertainties, m.FrequencyHz.StandardUncertainty(), m.ResistanceOhm.StandardUncertainty(),
				m.InductanceHenry.StandardUncertainty(), m.LoadedWidthHz.StandardUncertainty())
			for _, s := range m.Suppression {
				numbers, uncertainties = append(numbers, s.Value), append(uncertainties, s.StandardUncertainty())
			}
			if !(m.LoadedWidthHz.Value > 0 && m.ResistanceOhm.Value > 0 && m.InductanceHenry.Value > 0) {
				t.Fatalf("trial %d: %+v", trial, m)
			}
		}
		for _, x := range numbers {
			if math.IsNaN(x) || math.IsInf(x, 0) {
				t.Fatalf("trial %d: %s %+v %+v", trial, out.State, out.Modes, q)
			}
		}
		for _, x := range uncertainties {
			if math.IsNaN(x) || x < 0 {
				t.Fatalf("trial %d: an uncertainty is %g: %+v", trial, x, out.Modes)
			}
		}
		for _, o := range out.Observability {
			if !(o.NarrowestWidthHz > 0) || !(o.FromHz < o.ToHz) {
				t.Fatalf("trial %d: %+v", trial, o)
			}
		}
	}
}
