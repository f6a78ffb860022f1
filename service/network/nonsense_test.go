package network

import (
	"math"
	"testing"

	"example.com/admit/service/sweep"
	"pgregory.net/rapid"
)

// TestNonsense: whatever finite figures a calibration carries, Solve answers with an error or with terms that are numbers.
func TestNonsense(t *testing.T) {
	solved := 0
	rapid.Check(t, func(t *rapid.T) {
		figure := rapid.OneOf(rapid.SampledFrom([]float64{0, 1, -1, 1e12, -1e12, 1e-300, 0.0333}), rapid.Float64Range(-1, 1))
		value := rapid.OneOf(rapid.SampledFrom([]float64{0, 25, 1e12, 1e-300}), rapid.Float64Range(0, 1e3))
		c := &Calibration{
			Network: rapid.SampledFrom(Kinds()).Draw(t, "network"), ReferenceImpedanceOhm: value.Draw(t, "Z0"), NominalTerminationOhm: value.Draw(t, "Zt"),
			DriftGainDB: rapid.Float64Range(0, 40).Draw(t, "gain"), ContactUncertaintyOhm: value.Draw(t, "contact"),
		}
		for range rapid.IntRange(0, 5).Draw(t, "standards") {
			s := Standard{
				Kind:          rapid.SampledFrom(StandardKinds()).Draw(t, "kind"),
				ResistanceOhm: value.Draw(t, "R"), ResistanceUncertaintyOhm: value.Draw(t, "u(R)"),
				CapacitanceFarad: rapid.SampledFrom([]float64{0, 1e-13, 1}).Draw(t, "C"), InductanceHenry: rapid.SampledFrom([]float64{0, 1e-9, 1e12}).Draw(t, "L"),
			}
			hz := 1e6
			for range rapid.IntRange(1, 40).Draw(t, "points") {
				s.FrequencyHz = append(s.FrequencyHz, hz)
				hz += rapid.SampledFrom([]float64{1e-9, 1, 1e6, 1e11}).Draw(t, "step")
				s.Re, s.Im = append(s.Re, figure.Draw(t, "re")), append(s.Im, figure.Draw(t, "im"))
			}
			c.Standards = append(c.Standards, s)
		}
		result, err := Solve(c)
		if err != nil {
			if err.Error() == "" || len(err.Error()) > 5000 {
				t.Errorf("error of %d letters", len(err.Error()))
			}
			return
		}
		x := []float64{1e6, 1e6 + 1, 2e6}
		for _, q := range sweep.Quantities() {
			var terms Terms
			if result.Terms(&terms, x, q) != nil {
				continue
			}
			solved++
			all, err := result.Contributions(nil, x, q)
			if err != nil {
				t.Fatal(err)
			}
			all = append(all, Contribution{Name: "terms", Terms: terms})
			for _, n := range all {
				for i := range x {
					if !finite(n.Terms.A[i]) || !finite(n.Terms.B[i]) || !finite(n.Terms.C[i]) {
						t.Fatalf("%s of %s: %v %v %v", n.Name, q, n.Terms.A[i], n.Terms.B[i], n.Terms.C[i])
					}
				}
			}
		}
		if d, err := c.Drive(); err == nil && !(d.PowerAtResonanceWatt(0, 25) >= 0 && !math.IsInf(d.OpenVoltage(0), 0)) {
			t.Fatalf("drive %+v", d)
		}
	})
	if solved == 0 {
		t.Error("nothing was solved: the draws are too wild to test anything")
	}
}
