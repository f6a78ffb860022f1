package main

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"example.com/admit/cmd/prove/peer"
)

// disc is one row of the published fits of the measured 5 MHz discs.
type disc struct {
	file, sweep                 string
	harmonic                    int
	f0, q, r1Ohm, c1Fh, l1Henry float64
}

// discs reads the rows of the discs from the shared measurements.
func discs(t *testing.T) []disc {
	t.Helper()
	f, err := os.Open(peer.Shared(t, "data", "measured", "fits.csv"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	column := map[string]int{}
	for i, name := range rows[0] {
		column[name] = i
	}
	var out []disc
	for _, row := range rows[1:] {
		if !strings.HasPrefix(row[0], "at-cut-5mhz-disc") {
			continue
		}
		number := func(name string, scale float64) float64 {
			v, err := strconv.ParseFloat(row[column[name]], 64)
			if err != nil {
				t.Fatalf("%s: %v", name, err)
			}
			return v * scale
		}
		out = append(out, disc{row[0], row[1], int(number("harmonic_or_mode", 1)), number("f0_hz", 1), number("q", 1), number("r1_ohm", 1), number("c1_ff", 1e-15), number("l1_mh", 1e-3)})
	}
	if len(out) == 0 {
		t.Fatal("no discs in fits.csv")
	}
	return out
}

// openPartType is a part type whose limits no disc breaks: the fit is what is looked at.
const openPartType = `part_type: TM-DISC
version: 1
vibration_mode: thickness-shear
overtone: %d
nominal_frequency: %.0f Hz
calibration_required: false
circuit_condition: series-resonance
drive_level: 1 uW
maximum_drive_level: 100 uW
limits:
  motional_resistance: {max: 1 Mohm}
decision: {rule: simple, confidence: 0.95, attempts: 2, after_last_attempt: set-aside}
`

// nominalReflection is a calibration without standards.
const nominalReflection = `calibration: none
contact_head: N1-A
fixture_network: reflection
reference_impedance_ohm: 50
taken_at: 2026-11-30T06:00:00Z
valid_for: 24h
standards: []
`

// writeFolder makes an inspection folder around one sweep file.
func writeFolder(t *testing.T, sweepFile, quantity, partType, calibration string) string {
	t.Helper()
	dir := t.TempDir()
	write := func(name, text string) {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	name := filepath.Base(sweepFile)
	text, err := os.ReadFile(sweepFile)
	if err != nil {
		t.Fatal(err)
	}
	write(name, string(text))
	write("part-type.yaml", partType)
	inspectionText := `unit: {serial: TM0000123}
station: N1
contact_head: N1-A
measured_at: 2026-11-30T09:12:44Z
part_type: part-type.yaml
`
	if calibration != "" {
		write("calibration.yaml", calibration)
		inspectionText += "calibration: calibration.yaml\n"
	}
	write("inspection.yaml", inspectionText+fmt.Sprintf("sweeps:\n  - {file: %s, role: main, quantity: %s}\n", name, quantity))
	return dir
}

// judgement is what the tests read of the JSON form.
type judgement struct {
	Verdict      string
	RetestCauses []struct{ Cause, Text, Advice string }
	Findings     []struct{ Quantity, Outcome, Text string }
	Main         map[string]struct{ Value, StandardUncertainty float64 }
	Load         map[string]json.RawMessage
}

// judgeJSON runs `admit judge --json` and returns the exit status and what was printed.
func judgeJSON(t *testing.T, dir string) (int, judgement) {
	t.Helper()
	var out, errs strings.Builder
	code := run(t.Context(), []string{"judge", "--json", dir}, streams{strings.NewReader(""), &out, &errs})
	var j judgement
	if code <= exitRetest {
		if err := json.Unmarshal([]byte(out.String()), &j); err != nil {
			t.Fatalf("exit %d, not JSON: %v\n%s%s", code, err, out.String(), errs.String())
		}
	}
	if code == exitBad || code == exitTrouble {
		t.Logf("exit %d: %s", code, errs.String())
	}
	return code, j
}

// TestDiscsInReflection judges the twelve .s1p files of the discs against the published fits: fs within 1 ppm, R1, C1, L1 within 2.5 %, Q
// within 4 %. Their reference plane is about a degree off, and the stated uncertainty must cover what that does.
func TestDiscsInReflection(t *testing.T) {
	files, err := filepath.Glob(filepath.Join(peer.Shared(t, "data", "measured"), "at-cut-5mhz-disc-*.s1p"))
	if err != nil || len(files) != 12 {
		t.Fatalf("%d .s1p files, want 12 (%v)", len(files), err)
	}
	rows := discs(t)
	for _, file := range files {
		base := filepath.Base(file)
		stem, harmonic, _ := strings.Cut(strings.TrimSuffix(base, ".s1p"), "-n")
		n, _ := strconv.Atoi(harmonic)
		var want *disc
		for i := range rows {
			if rows[i].file == stem+".csv" && rows[i].harmonic == n {
				want = &rows[i] // the first sweep of each state
				break
			}
		}
		if want == nil {
			t.Errorf("%s: no published fit", base)
			continue
		}
		code, j := judgeJSON(t, writeFolder(t, file, "s11", fmt.Sprintf(openPartType, n, want.f0), nominalReflection))
		if code != exitPass {
			t.Errorf("%s: exit %d, %+v", base, code, j.RetestCauses)
			continue
		}
		for _, c := range []struct {
			name      string
			want, tol float64
		}{
			{"motionalResonanceHz", want.f0, 1e-6}, {"motionalResistanceOhm", want.r1Ohm, 0.025}, {"motionalCapacitanceF", want.c1Fh, 0.025},
			{"motionalInductanceH", want.l1Henry, 0.025}, {"qualityFactor", want.q, 0.04},
		} {
			got := j.Main[c.name]
			if e := got.Value/c.want - 1; math.Abs(e) > c.tol {
				t.Errorf("%s: %s %.9g, published %.9g: off by %.2e, want within %.1e", base, c.name, got.Value, c.want, e, c.tol)
			}
			if d := math.Abs(got.Value - c.want); d > 4*got.StandardUncertainty {
				t.Errorf("%s: %s %.9g ± %.2g (k = 1) does not cover the published %.9g", base, c.name, got.Value, got.StandardUncertainty, c.want)
			}
		}
		if c0 := j.Main["shuntCapacitanceF"].Value; c0 < 60e-12 || c0 > 110e-12 {
			t.Errorf("%s: C0 %.3g F, want 70 to 100 pF of cell and cable", base, c0)
		}
	}
}

// TestDiscsAsAdmittance judges every sweep of the discs' .csv files: fs within 1 ppm.
func TestDiscsAsAdmittance(t *testing.T) {
	rows := discs(t)
	if testing.Short() {
		rows = rows[:12]
	}
	tables := map[string]map[string]string{}
	for _, want := range rows {
		if tables[want.file] == nil {
			tables[want.file] = admittances(t, peer.Shared(t, "data", "measured", want.file))
		}
		path := filepath.Join(t.TempDir(), "main.csv")
		text := tables[want.file][fmt.Sprintf("%s,%d", want.sweep, want.harmonic)]
		if err := os.WriteFile(path, []byte("frequency_hz,conductance_s,susceptance_s\n"+text), 0o600); err != nil {
			t.Fatal(err)
		}
		code, j := judgeJSON(t, writeFolder(t, path, "admittance", fmt.Sprintf(openPartType, want.harmonic, want.f0), ""))
		got := j.Main["motionalResonanceHz"].Value
		if code != exitPass || math.Abs(got/want.f0-1) > 1e-6 {
			t.Errorf("%s sweep %s harmonic %d: exit %d, fs %.3f Hz, published %.3f (%.2f ppm) %+v", want.file, want.sweep, want.harmonic, code, got, want.f0, (got/want.f0-1)*1e6, j.RetestCauses)
		}
	}
}

// admittances splits a disc's table into one text for each sweep and harmonic, without the two leading columns.
func admittances(t *testing.T, path string) map[string]string {
	t.Helper()
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	parts := map[string]*strings.Builder{}
	for _, line := range strings.Split(string(text), "\n")[1:] {
		fields := strings.SplitN(strings.TrimSpace(line), ",", 3)
		if len(fields) < 3 {
			continue
		}
		key := fields[0] + "," + fields[1]
		if parts[key] == nil {
			parts[key] = &strings.Builder{}
		}
		parts[key].WriteString(fields[2] + "\n")
	}
	out := map[string]string{}
	for k, b := range parts {
		out[k] = b.String()
	}
	return out
}

// TestFilterIsNoCrystal: a band-pass filter is a retest with model_misfit, exit status 2.
func TestFilterIsNoCrystal(t *testing.T) {
	file := peer.Shared(t, "data", "measured", "saw-filter-401mhz-not-a-resonator.s2p")
	through := strings.Replace(nominalReflection, "reflection", "series-through", 1)
	code, j := judgeJSON(t, writeFolder(t, file, "s21", fmt.Sprintf(openPartType, 1, 401e6), through))
	found := false
	for _, c := range j.RetestCauses {
		found = found || c.Cause == "model_misfit"
	}
	if code != exitRetest || !found {
		t.Errorf("exit %d, %+v; want 2 with model_misfit", code, j.RetestCauses)
	}
}
