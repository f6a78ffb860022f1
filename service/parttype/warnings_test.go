package parttype

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// warned parses a part type with some sections and returns its warnings.
func warned(t *testing.T, sections string) []string {
	t.Helper()
	p, err := Parse("x", []byte(`part_type: TM-25M000-F10
version: 1
vibration_mode: thickness-shear
overtone: 1
nominal_frequency: 25 MHz
circuit_condition: {load_capacitance: 10 pF, load_connection: series}
drive_level: 10 uW
maximum_drive_level: 200 uW
`+sections))
	if err != nil {
		t.Fatal(err)
	}
	return Warnings(p)
}

// TestWarnings: each case warns of exactly the limits named, by what their sentences begin with. 1/(2 pi 25 MHz 5 fF 40 ohm) is Q = 31831.
func TestWarnings(t *testing.T) {
	for _, c := range []struct {
		name, sections string
		want           []string
	}{
		{"nothing to say", "limits: {motional_resistance: {max: 40 ohm}, motional_capacitance: {min: 4 fF, max: 7 fF}, quality_factor: {min: 30000}}\n", nil},
		{"Q makes the resistance idle", "limits: {motional_resistance: {max: 40 ohm}, motional_capacitance: {min: 5 fF, max: 7 fF}, quality_factor: {min: 40000}}\n",
			[]string{"motional_resistance: decides nothing, since quality_factor and motional_capacitance already leave at most 31.83"}},
		{"the resistance makes Q idle", "limits: {motional_resistance: {max: 40 ohm}, motional_capacitance: {min: 4 fF, max: 5 fF}, quality_factor: {min: 20000}}\n",
			[]string{"quality_factor: decides nothing, since motional_resistance and motional_capacitance already leave at least 3.183e+04"}},
		{"Q and resistance exclude each other", "limits: {motional_resistance: {min: 20 ohm, max: 40 ohm}, motional_capacitance: {min: 5 fF, max: 7 fF}, quality_factor: {min: 90000}}\n",
			[]string{"motional_resistance: no unit can meet it together with quality_factor"}},
		{"without C1 there is no relation", "limits: {motional_resistance: {max: 40 ohm}, quality_factor: {min: 90000}}\n", nil},
		{"Rr makes R1 idle", "limits: {motional_resistance: {max: 40 ohm}, resonance_resistance: {max: 35 ohm}}\n", []string{"motional_resistance: decides nothing, since resonance_resistance"}},
		{"R1 and C0 make RL idle", "limits: {motional_resistance: {max: 40 ohm}, shunt_capacitance: {max: 2 pF}, load_resonance_resistance: {max: 60 ohm}}\n",
			[]string{"load_resonance_resistance: decides nothing, since motional_resistance and shunt_capacitance already leave at most 57.6"}},
		{"RL makes R1 idle", "limits: {motional_resistance: {max: 60 ohm}, load_resonance_resistance: {max: 50 ohm}}\n",
			[]string{"motional_resistance: decides nothing, since load_resonance_resistance and shunt_capacitance already leave at most 50"}},
		{"RL makes the start margin idle", "limits: {load_resonance_resistance: {max: 60 ohm}, start_margin: {negative_resistance: -400 ohm, min: 5}}\n",
			[]string{"start_margin: decides nothing, since load_resonance_resistance already leave at least 6.667"}},
		{"the start margin makes RL idle", "limits: {load_resonance_resistance: {max: 100 ohm}, start_margin: {negative_resistance: -400 ohm, min: 5}}\n",
			[]string{"load_resonance_resistance: decides nothing, since start_margin already leave at most 80"}},
		{"capacitances make the pulling sensitivity idle", "limits: {motional_capacitance: {min: 5 fF, max: 6 fF}, shunt_capacitance: {min: 1 pF, max: 2 pF}, pulling_sensitivity_ppm_per_pf: {min: -30, max: -10}}\n",
			[]string{"pulling_sensitivity_ppm_per_pf (as a magnitude): decides nothing, since motional_capacitance and shunt_capacitance already leave 17.36 to 24.79"}},
		{"capacitances exclude the pulling range", "limits: {motional_capacitance: {max: 6 fF}, shunt_capacitance: {max: 2 pF}, pulling_range_ppm: {from: 8 pF, to: 12 pF, min: 400}}\n",
			[]string{"pulling_range_ppm: no unit can meet it"}},
		{"ratio and R1 make the resistance at every level idle", "limits: {motional_resistance: {max: 40 ohm}}\ndrive: {levels: [1 uW, 10 uW], resistance_ratio: {reference: nominal-level, max: 1.4}, motional_resistance: {max: 60 ohm}}\n",
			[]string{"drive.motional_resistance: decides nothing, since motional_resistance and drive.resistance_ratio already leave at most 56"}},
		{"the resistance at every level makes R1 idle", "limits: {motional_resistance: {max: 40 ohm}}\ndrive: {levels: [1 uW, 10 uW], motional_resistance: {max: 30 ohm}}\n",
			[]string{"motional_resistance: decides nothing, since drive.motional_resistance"}},
		{"no level is the one to compare with", "limits: {}\ndrive: {levels: [1 uW, 20 uW], resistance_ratio: {reference: nominal-level, max: 1.4}}\n", []string{"drive.levels: none of them"}},
		{"no low level first", "limits: {}\ndrive: {levels: [10 uW, 1 uW], resistance_ratio: {reference: nominal-level, max: 1.4}}\n", []string{"drive.levels: the first is not below"}},
	} {
		got := warned(t, c.sections)
		if len(got) != len(c.want) {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
			continue
		}
		for i := range got {
			if !strings.HasPrefix(got[i], c.want[i]) {
				t.Errorf("%s: %q, want it to begin with %q", c.name, got[i], c.want[i])
			}
		}
	}
}

// TestScenario: of the plant's own limits files one limits Rr and R1 alike, to be seen in both; nothing else is idle.
func TestScenario(t *testing.T) {
	files, err := filepath.Glob("../../testdata/part_types/*.yaml")
	if err != nil || len(files) != 5 {
		t.Fatalf("%d files (%v)", len(files), err)
	}
	var all []string
	for _, file := range files {
		source, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		p, err := Parse(file, source)
		if err != nil {
			t.Fatal(err)
		}
		for _, w := range Warnings(p) {
			all = append(all, p.Name+" "+w)
		}
	}
	if len(all) != 1 || !strings.HasPrefix(all[0], "TM-50M000-T3 motional_resistance: decides nothing, since resonance_resistance") {
		t.Errorf("%q", all)
	}
}
