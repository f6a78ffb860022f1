package crystal_test

import (
	"encoding/csv"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"example.com/admit/service/crystal"
)

// row is one line of a table of outside values, by column name.
type row map[string]string

// readTable reads a CSV of the project's testdata. Every row must name its source and stand on a basis that may be claimed
// as an outside authority; a table that lost rows is an error, not a smaller test.
func readTable(t *testing.T, path string, rows int) []row {
	t.Helper()
	file, err := os.Open(filepath.Join("..", "..", "testdata", path))
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	lines, err := csv.NewReader(file).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var table []row
	for n, line := range lines[1:] {
		r := row{}
		for k, name := range lines[0] {
			r[name] = line[k]
		}
		if r["source"] == "" {
			t.Errorf("%s line %d: no source", path, n+2)
		}
		if b := r["basis"]; b != "published" && b != "computed-from-published-formula" {
			t.Errorf("%s line %d: basis %q", path, n+2, b)
		}
		table = append(table, r)
	}
	if len(table) != rows {
		t.Errorf("%s: %d rows, want %d", path, len(table), rows)
	}
	return table
}

// number returns a column as a float, NaN where it is empty.
func (r row) number(t *testing.T, column string) float64 {
	t.Helper()
	text, ok := r[column]
	if !ok {
		t.Fatalf("no column %q", column)
	}
	if text == "" {
		return math.NaN()
	}
	v, err := strconv.ParseFloat(text, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// unit returns the unit of the columns r1_ohm, l1_h, c1_f, c0_f; an empty column leaves a NaN or a zero where it was.
func (r row) unit(t *testing.T) crystal.Unit {
	t.Helper()
	u := crystal.Unit{Modes: []crystal.Mode{
		crystal.ModeFromInductanceCapacitance(r.number(t, "r1_ohm"), r.number(t, "l1_h"), r.number(t, "c1_f")),
	}}
	if c0 := r.number(t, "c0_f"); !math.IsNaN(c0) {
		u.ShuntCapacitanceFarad = c0
	}
	return u
}

// tolerance reads the forms of the tolerance column: "8 Hz" and "0.05" are absolute, "1e-11 rel" is relative to the value.
func (r row) tolerance(t *testing.T) float64 {
	t.Helper()
	fields := strings.Fields(r["tolerance"])
	v, err := strconv.ParseFloat(fields[0], 64)
	if err != nil {
		t.Fatal(err)
	}
	if len(fields) > 1 && fields[1] == "rel" {
		v *= math.Abs(r.number(t, "value"))
	}
	return v
}

// must returns the first of the results of a root search, and fails the test if there is none.
func must(t *testing.T) func(value, _ float64, err error) float64 {
	return func(value, _ float64, err error) float64 {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
		return value
	}
}

// TestLoadResonanceTable holds every row of testdata/load_resonance: printed values of application notes and data sheets,
// and 30-digit evaluations on printed inputs.
func TestLoadResonanceTable(t *testing.T) {
	for _, r := range readTable(t, "load_resonance/examples.csv", 86) {
		t.Run(r["example"]+"/"+r["output"], func(t *testing.T) {
			got, want, tolerance := loadResonanceOutput(t, r), r.number(t, "value"), r.tolerance(t)
			if !(math.Abs(got-want) <= tolerance) {
				t.Errorf("%.15g, want %.15g within %g; source: %s", got, want, tolerance, r["source"])
			}
		})
	}
}

// loadResonanceOutput computes the output that a row asks for, from its inputs. An output it does not know is a failure.
func loadResonanceOutput(t *testing.T, r row) float64 {
	u := r.unit(t)
	load := r.number(t, "cl_f")
	if r["l1_h"] != "" && r["c1_f"] == "" {
		// The data sheet prints L1 and the frequency at the load; C1 follows.
		c1 := crystal.MotionalCapacitanceFromLoad(32e6, r.number(t, "l1_h"), u.ShuntCapacitanceFarad, load)
		u.Modes[0] = crystal.ModeFromInductanceCapacitance(r.number(t, "r1_ohm"), r.number(t, "l1_h"), c1)
	}
	if r["l1_h"] == "" && r["c1_f"] != "" {
		// Only ratios of capacitances are asked for: any frequency and resistance do.
		u.Modes[0] = crystal.ModeFromCapacitance(10e6, 10, r.number(t, "c1_f"))
	}
	switch r["output"] {
	case "fs_hz":
		return u.Modes[0].ResonanceHz
	case "fp_hz":
		return u.ParallelResonanceHz()
	case "fL_hz", "fL_lossless_hz":
		return u.LosslessLoadResonanceHz(load)
	case "fL_first_order_hz":
		return u.FirstOrderLoadResonanceHz(load)
	case "fL_series_exact_hz":
		return must(t)(u.LoadResonance(load, crystal.SeriesLoad))
	case "fL_parallel_exact_hz":
		return must(t)(u.LoadResonance(load, crystal.ParallelLoad))
	case "RL_formula_ohm":
		return u.FirstOrderLoadResistanceOhm(load)
	case "RL_exact_ohm":
		_, resistance, err := u.LoadResonance(load, crystal.SeriesLoad)
		if err != nil {
			t.Fatal(err)
		}
		return resistance
	case "DL_ppm", "DL_lossless_ppm":
		return u.LosslessLoadOffset(load) * 1e6
	case "DL_first_order_ppm":
		return u.FirstOrderLoadOffset(load) * 1e6
	case "sensitivity_ppm_per_pF":
		return u.FirstOrderPullingSensitivity(load) * 1e-6
	case "pulling_range_first_order_ppm":
		return u.FirstOrderPullingRange(10e-12, 30e-12) * 1e6
	case "C1_f":
		return u.Modes[0].CapacitanceFarad()
	case "CL_for_8MHz_pF":
		return u.LosslessEffectiveLoadCapacitance(8e6) * 1e12
	case "C0_from_fs_9996490_fp_10017730_pF":
		return crystal.ShuntCapacitanceFromResonances(9996490, 10017730, r.number(t, "c1_f")) * 1e12
	case "shift_for_0.175pF_at_45ppm_per_pF":
		// A unit that pulls by 45 ppm/pF at 10 pF, moved by 0.175 pF around it.
		const c0, center, sensitivity = 3e-12, 10e-12, 45e6
		v := crystal.Unit{ShuntCapacitanceFarad: c0, Modes: []crystal.Mode{
			crystal.ModeFromCapacitance(8e6, 10, 2*(c0+center)*(c0+center)*sensitivity)}}
		return v.FirstOrderPullingRange(center-0.0875e-12, center+0.0875e-12) * 1e6
	case "rext_ohm_8MHz_15pF":
		// The printed 1/(2 pi f C) is the reactance of a unit that has no mode; the c0_f column holds the capacitance.
		v := crystal.Unit{ShuntCapacitanceFarad: r.number(t, "c0_f")}
		return -imag(v.Impedance(8e6))
	}
	t.Fatalf("no function for output %q", r["output"])
	return 0
}

// TestLosslessReproducesNominal holds the stricter claim behind the rows marked "against fL_lossless": the exact series root
// must not be what reproduces the nominal frequency, or the lossless form would be tested against itself.
func TestLosslessReproducesNominal(t *testing.T) {
	for _, r := range readTable(t, "load_resonance/examples.csv", 86) {
		if !strings.HasSuffix(r["tolerance"], "against fL_lossless") {
			continue
		}
		exact := must(t)(r.unit(t).LoadResonance(r.number(t, "cl_f"), crystal.SeriesLoad))
		if math.Abs(exact-r.number(t, "value")) < 10*r.tolerance(t) {
			t.Errorf("%s: exact and lossless load resonance are not apart", r["example"])
		}
	}
}

// TestSixFrequencies holds fm, fs, fr, fa, fp, fn and the four impedances of six circuits, down to one without a zero-phase
// frequency.
func TestSixFrequencies(t *testing.T) {
	const frequencyTolerance, resistanceTolerance = 1e-12, 1e-9
	for _, r := range readTable(t, "six_frequencies/six_frequencies.csv", 6) {
		t.Run(r["example"], func(t *testing.T) {
			u := r.unit(t)
			check := func(column string, got, relative float64) {
				t.Helper()
				want := r.number(t, column)
				if !(math.Abs(got-want) <= relative*want) {
					t.Errorf("%s: %.15g, want %.15g, off by %.2g of it", column, got, want, got/want-1)
				}
			}
			check("fs_hz", u.Modes[0].ResonanceHz, frequencyTolerance)
			check("fp_hz", u.ParallelResonanceHz(), frequencyTolerance)
			check("q", u.Modes[0].QualityFactor(), resistanceTolerance)
			check("m", u.FigureOfMerit(), resistanceTolerance)

			searches := []struct {
				frequency, impedance string
				search               func() (float64, float64, error)
				absent               error
			}{
				{"fm_hz", "z_min_ohm", u.MaximumAdmittance, crystal.ErrNoExtremum},
				{"fn_hz", "z_max_ohm", u.MinimumAdmittance, crystal.ErrNoExtremum},
				{"fr_hz", "rr_ohm", u.Resonance, crystal.ErrNoZeroPhase},
				{"fa_hz", "ra_ohm", u.Antiresonance, crystal.ErrNoZeroPhase},
			}
			for _, s := range searches {
				frequency, impedance, err := s.search()
				if r[s.frequency] == "" {
					if err != s.absent {
						t.Errorf("%s: error %v, want %v", s.frequency, err, s.absent)
					}
					continue
				}
				if err != nil {
					t.Errorf("%s: %v", s.frequency, err)
				}
				check(s.frequency, frequency, frequencyTolerance)
				check(s.impedance, impedance, resistanceTolerance)
			}
		})
	}
}

// TestPublishedCrystals holds the frequency and the Q that follow from printed parameters. The columns carry twelve and eight
// significant digits.
func TestPublishedCrystals(t *testing.T) {
	for _, r := range readTable(t, "published_crystals/crystals.csv", 20) {
		t.Run(r["name"], func(t *testing.T) {
			mode := r.unit(t).Modes[0]
			if r["c1_f"] == "" {
				// No C1 in print: the Q of the table is the one at the printed frequency.
				mode.ResonanceHz = r.number(t, "f_hz")
			} else {
				checkDigits(t, "f_from_l1c1_hz", mode.ResonanceHz, r.number(t, "f_from_l1c1_hz"), 12)
				if c1 := r.number(t, "c1_f"); math.Abs(mode.CapacitanceFarad()-c1) > 4*0x1p-52*c1 {
					t.Errorf("C1 came back as %g, want %g", mode.CapacitanceFarad(), c1)
				}
			}
			checkDigits(t, "q_computed", mode.QualityFactor(), r.number(t, "q_computed"), 8)
		})
	}
}

// checkDigits fails unless got rounds to want at a number of significant digits.
func checkDigits(t *testing.T, what string, got, want float64, digits int) {
	t.Helper()
	unit := math.Pow(10, math.Floor(math.Log10(want))-float64(digits)+1)
	if !(math.Abs(got-want) <= 0.5000001*unit) {
		t.Errorf("%s: %.15g, want %.*g", what, got, digits, want)
	}
}
