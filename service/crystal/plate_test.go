package crystal_test

import (
	"math"
	"testing"

	"example.com/admit/service/crystal"
)

// TestOvertoneRatioRows holds roots, ratios and gaps against the published formula, evaluated elsewhere.
func TestOvertoneRatioRows(t *testing.T) {
	for _, r := range readTable(t, "overtone_ratios/ratios.csv", 75) {
		p := crystal.Plate{CouplingSquared: r.number(t, "k_squared"), ElectrodeMassRatio: r.number(t, "electrode_mass_ratio")}
		n := int(r.number(t, "n"))
		for _, c := range []struct {
			column   string
			got, rel float64
		}{
			{"x_n", p.ResonanceRoot(n), 1e-12},
			{"fn_over_n_f1", p.OvertoneRatio(n), 1e-6},
			{"gap_fa_fs_ppm", (p.AntiresonanceRoot(n)/p.ResonanceRoot(n) - 1) * 1e6, 1e-6},
		} {
			if want := r.number(t, c.column); !(math.Abs(c.got/want-1) <= c.rel) {
				t.Errorf("%s n=%d k^2=%s R=%s: %s %.12g, want %.12g", r["cut"], n, r["k_squared"], r["electrode_mass_ratio"], c.column, c.got, want)
			}
		}
	}
}

// TestPlateEdges: capacitance ratios of the ideal plate, and orders that do not exist.
func TestPlateEdges(t *testing.T) {
	at := crystal.Plate{CouplingSquared: 0.0078}
	for _, c := range []struct {
		source string
		order  int
		want   float64
	}{
		{"Johannsmann et al., Sensors 21 (2021) 3490, A3: n^2 pi^2/(8 k^2)", 1, 158.2},
		{"same", 3, 1423.5}, {"same", 5, 3954}, {"same", 7, 7750}, {"same", 9, 12811},
	} {
		if got := at.CapacitanceRatio(c.order); math.Abs(got/c.want-1) > 4e-4 {
			t.Errorf("r of order %d: %.1f, want %g (%s)", c.order, got, c.want, c.source)
		}
	}
	if got := (crystal.Plate{}).AntiresonanceRoot(5); got != 5*math.Pi/2 {
		t.Errorf("bare plate, order 5: %g", got)
	}
	for _, n := range []int{-1, 0, 2, 4} {
		if got := at.ResonanceRoot(n); !math.IsNaN(got) {
			t.Errorf("order %d has a resonance at X = %g", n, got)
		}
	}
	if got := (crystal.Plate{CouplingSquared: 1.5}).ResonanceRoot(1); !math.IsNaN(got) {
		t.Errorf("a coupling of more than 1 gives X = %g", got)
	}
}
