package uncertainty

import (
	"encoding/csv"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
)

// readRows reads a table of testdata and checks that every row names its source.
func readRows(t *testing.T, name string) []map[string]string {
	t.Helper()
	f, err := os.Open(filepath.Join("testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	lines, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var rows []map[string]string
	for _, line := range lines[1:] {
		row := map[string]string{}
		for i, key := range lines[0] {
			row[key] = line[i]
		}
		if row["source"] == "" || row["basis"] != "published" && row["basis"] != "computed-from-published-formula" {
			t.Errorf("%s: %v: source or basis is missing", name, row)
		}
		rows = append(rows, row)
	}
	return rows
}

// limit reads an end of an interval, open where the cell is empty.
func limit(t *testing.T, cell string, open float64) float64 {
	t.Helper()
	if cell == "" {
		return open
	}
	return number(t, cell)
}

func number(t *testing.T, cell string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(cell, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// within compares got with a row's value by its tolerance.
func within(t *testing.T, row map[string]string, got float64) {
	t.Helper()
	want := number(t, row["value"])
	cell, isRelative := strings.CutSuffix(row["tolerance"], " rel")
	tolerance := number(t, cell)
	if isRelative {
		tolerance *= math.Abs(want)
	}
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: %v, want %v ± %v (%s)", row["example"], got, want, tolerance, row["source"])
	}
}

func TestWorkedExamples(t *testing.T) {
	results := map[string]map[string]float64{
		"gum-h1":       endGauge(t),
		"gum-h2":       impedance(),
		"gum-h2-exact": impedance(),
		"gum-4.4.3":    {"s_over_sqrt_n_degC": temperatureMean()},
		"gum-g41":      {"nu_eff": EffectiveFreedom(Component{0.25, 9}, Component{0.57, 4}, Component{0.82, 14})},
		"gum-g42":      {"dof": FreedomOfRelative(0.25)},
	}
	seen := 0
	for _, row := range readRows(t, "worked_examples.csv") {
		got, ok := results[row["example"]][row["quantity"]]
		if !ok {
			t.Errorf("nothing computed for %s %s", row["example"], row["quantity"])
			continue
		}
		within(t, row, got)
		seen++
	}
	if seen != 33 {
		t.Errorf("%d rows compared, want 33", seen)
	}
}

// endGauge evaluates JCGM 100:2008 H.1. Inputs in nanometres, with sensitivity coefficients and degrees of freedom as printed there.
func endGauge(t *testing.T) map[string]float64 {
	u := []float64{25, 5.8, 3.9, 6.7, 0.58e-6, 0.029}
	sensitivity := []float64{1, 1, 1, 1, -5e6, 575}
	freedom := []float64{18, 24, 5, 8, 50, 2}
	b := NewBudget(1)
	out := map[string]float64{}
	components := make([]Component, len(u))
	for i := range u {
		name := "contribution_" + strconv.Itoa(i+1)
		components[i] = Component{math.Abs(sensitivity[i] * u[i]), freedom[i]}
		b.AddEffect(Source(name), Statistical, freedom[i], []float64{sensitivity[i] * u[i]})
		out[name+"_nm"] = components[i].Uncertainty
	}
	out["u_c_nm"] = b.StandardUncertainty(0)
	out["nu_eff"] = EffectiveFreedom(components...)
	if got := b.EffectiveFreedom(0); math.Abs(got-out["nu_eff"]) > 1e-12 {
		t.Errorf("budget: %v degrees of freedom, components: %v", got, out["nu_eff"])
	}
	out["nu_eff_truncated"] = TruncatedFreedom(out["nu_eff"])
	out["k95"] = CoverageFactor(0.95, out["nu_eff"])
	out["U99_nm"], out["k99"] = Expand(out["u_c_nm"], out["nu_eff"], 0.99)
	return out
}

// impedance evaluates JCGM 100:2008 H.2: R = V/I cos φ, X = V/I sin φ, Z = V/I of five simultaneous readings.
func impedance() map[string]float64 {
	readings := [][]float64{
		{5.007, 4.994, 5.005, 4.990, 4.999},
		{19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3},
		{1.0456, 1.0438, 1.0468, 1.0428, 1.0433},
	}
	mean, covariance := make([]float64, 3), make([]float64, 9)
	MeanCovariance(mean, covariance, readings)
	v, i := mean[0], mean[1]
	sin, cos := math.Sincos(mean[2])
	z := v / i
	jacobian := []float64{
		cos / i, -z * cos / i, -z * sin,
		sin / i, -z * sin / i, z * cos,
		1 / i, -z / i, 0,
	}
	y := make([]float64, 9)
	Propagate(y, jacobian, covariance, 3, 3)
	return map[string]float64{
		"R_ohm": z * cos, "X_ohm": z * sin, "Z_ohm": z,
		"u_R_ohm": math.Sqrt(y[0]), "u_X_ohm": math.Sqrt(y[4]), "u_Z_ohm": math.Sqrt(y[8]),
		"r_V_I": Correlation(covariance, 3, 0, 1), "r_V_phi": Correlation(covariance, 3, 0, 2), "r_I_phi": Correlation(covariance, 3, 1, 2),
		"r_R_X": Correlation(y, 3, 0, 1), "r_R_Z": Correlation(y, 3, 0, 2), "r_X_Z": Correlation(y, 3, 1, 2),
	}
}

// temperatureMean evaluates JCGM 100:2008 4.4.3: the standard uncertainty of the mean of twenty readings.
func temperatureMean() float64 {
	readings := [][]float64{{
		96.90, 98.18, 98.25, 98.61, 99.03, 99.49, 99.56, 99.74, 99.89, 100.07,
		100.33, 100.42, 100.68, 100.95, 101.11, 101.20, 101.57, 101.84, 102.36, 102.72,
	}}
	mean, variance := []float64{0}, []float64{0}
	MeanCovariance(mean, variance, readings)
	return math.Sqrt(variance[0])
}

// JCGM 100:2008 G.4.1: U95 = 2.2 % for the three components, whether ν is 18.999 or the printed 19.0.
func TestExpandedOfThreeComponents(t *testing.T) {
	u := RootSumSquares(0.25, 0.57, 0.82)
	expanded, k := Expand(u, EffectiveFreedom(Component{0.25, 9}, Component{0.57, 4}, Component{0.82, 14}), 0.95)
	if math.Abs(expanded-2.2) > 0.05 || math.Abs(k-2.1) > 0.011 {
		t.Errorf("U = %.4f %% with k = %.4f", expanded, k)
	}
}

func TestPublishedConformance(t *testing.T) {
	seen := 0
	for _, row := range readRows(t, "conformance.csv") {
		y := number(t, row["y"])
		lower, upper := limit(t, row["lower"], math.Inf(-1)), limit(t, row["upper"], math.Inf(1))
		var got float64
		switch row["quantity"] {
		case "conformance":
			got = Conformance(y, number(t, row["u"]), lower, upper)
		case "nonconformance":
			got = Nonconformance(y, number(t, row["u"]), lower, upper)
		case "guard-factor":
			got = GuardFactor(y)
		}
		within(t, row, got)
		// An absolute tolerance of 1e-9 says nothing about a risk of 1e-9: the digits of the row do.
		if want := number(t, row["value"]); math.Abs(got-want) > 2e-9*want {
			t.Errorf("%s: %.12g, want %.12g to nine digits", row["example"], got, want)
		}
		seen++
	}
	if seen != 22 {
		t.Errorf("%d rows compared, want 22", seen)
	}
}
