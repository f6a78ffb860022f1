package inspection_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
	"example.com/admit/service/wire"
)

// TestNonsenseNeverPasses: mixtures of sweeps in every role, of samples that no unit gives, at frequencies and powers that may or may not make sense. None
// passes, none is an error but a refusal by name, and every number of what is told is finite.
func TestNonsenseNeverPasses(t *testing.T) {
	n := 1500
	if testing.Short() {
		n = 300
	}
	const sections = driveSection + `
overtones:
  - {order: 3, suppression_db: {min: 10}, definition: resistance-ratio}
  - {order: 5, suppression_db: {max: 30}, definition: pi-network-transmission}
grades: {of: [{name: A, limits: {motional_resistance: {max: 20 ohm}}}, {name: B, limits: {}}]}
temperature: {reference_c: 25, allowed_c: {min: -40, max: 90}, curve: {first: 0.1, third: 1e-4}}
`
	f := newFloor(t, 2, 41, sections, about(thirdOvertone(), 0.014, 41), about(thirdOvertone()*5/3, 0.014, 41))
	rng := rand.New(rand.NewPCG(41, 42))
	pick := func(of ...float64) float64 { return of[rng.IntN(len(of))] }
	good := f.series(f.nominal(nil))
	outcomes := map[verdict.Verdict]int{}
	for range n {
		var sweeps []sweep.Sweep
		for range 1 + rng.IntN(7) {
			if rng.IntN(5) == 0 {
				sweeps = append(sweeps, good[rng.IntN(len(good))])
				continue
			}
			w := sweep.Sweep{Role: sweep.Roles()[rng.IntN(5)], Quantity: sweep.S21}
			switch w.Role {
			case sweep.Drive:
				w.DriveStep = rng.IntN(5)
			case sweep.Overtone:
				w.Order = 1 + 2*rng.IntN(4)
			}
			if rng.IntN(4) > 0 {
				w.SourcePowerDBm = pointer(pick(-200, -60, -20, -2, 0))
			}
			points := 9 + rng.IntN(60)
			centre := f.Kind.ResonanceHz() * pick(1, 1, 3, 5, 0.9, 1e-3)
			span := centre * pick(1e-9, 1e-5, 1e-3, 0.02, 0.5)
			re, im, noise := pick(0, 1e-300, 0.033, 1, -1, 1e11), pick(0, 0, 1e-3, -1e11), pick(0, 1e-12, 1e-4, 1, 1e10)
			for i := range points {
				w.FrequencyHz = append(w.FrequencyHz, centre+span*(float64(i)/float64(points-1)-0.5))
				w.Re, w.Im = append(w.Re, re+noise*rng.NormFloat64()), append(w.Im, im+noise*rng.NormFloat64())
			}
			if len(w.Check()) == 0 {
				sweeps = append(sweeps, w)
			}
		}
		c := f.with(sweeps...)
		c.Begin.Temperature = &inspection.Temperature{Celsius: pick(-40, 25, 90), StandardUncertainty: pick(0, 0.2, 100)}
		c.Background.Lot = &inspection.LotMedian{Units: 9, ResistanceOhm: pick(18, 1e-300), CapacitanceFarad: pick(5e-15, 1e-300), ShuntCapacitanceFarad: 1.6e-12}
		c.Background.Readings = []verdict.Past{{Quantity: "motional_resistance", Where: verdict.Nowhere, Mean: verdict.Value{Value: pick(18, 1e300), StandardUncertainty: pick(0.1, 1e300)}, Readings: 1}}
		j, err := f.judge.Judge(t.Context(), c)
		if err != nil {
			if inspection.KindOf(err) != inspection.Malformed {
				t.Fatalf("%v", err)
			}
			continue
		}
		outcomes[j.Verdict]++
		if j.Verdict == verdict.Pass {
			t.Fatalf("nonsense passes: %s", told(&j))
		}
		if _, _, err := wire.JudgementFromProto(wire.JudgementToProto(&j, "")); err != nil {
			t.Fatalf("%v in %s", err, told(&j))
		}
		for _, f := range j.Findings {
			if math.IsNaN(f.ConformanceProbability) || f.Text == "" {
				t.Fatalf("%+v", f)
			}
		}
	}
	if outcomes[verdict.Retest] < n/20 {
		t.Errorf("outcomes %v of %d: too few to prove anything", outcomes, n)
	}
	t.Log(outcomes)
}
