package parttype

import (
	"math"
	"path/filepath"
	"testing"

	"example.com/admit/service/crystal"
)

// The nominal unit of each part type of the scenario lies well inside every limit of its file: at least a tenth of the bound away.
func TestScenarioPartTypes(t *testing.T) {
	tests := []struct {
		name                           string
		r1Ohm, c1Farad, c0Farad, loadF float64
		nominalHz                      float64
		overtone                       int
		source                         string
	}{
		{"TM-32K768-F7", 38e3, 3.4e-15, 1.3e-12, 7e-12, 32768, 1, "table of the scenario"},
		{"TM-12M288-F16", 14, 11e-15, 3.1e-12, 16e-12, 12.288e6, 1, "table of the scenario"},
		{"TM-25M000-F10", 18, 5.5e-15, 1.6e-12, 10e-12, 25e6, 1, "table of the scenario"},
		{"TM-50M000-T3", 32, 1.1e-15, 3.4e-12, 0, 50e6, 3, "table of the scenario"},
		{"TM-100M000-T5", 48, 0.45e-15, 3.6e-12, 0, 100e6, 5, "table of the scenario"},
	}
	files, err := filepath.Glob("../../fixtures/simulated/part_types/*.yaml")
	if err != nil || len(files) != len(tests) {
		t.Fatalf("found %d part types, want %d: %v", len(files), len(tests), err)
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			p, err := Parse(test.name+".yaml", read(t, "../../fixtures/simulated/part_types/"+test.name+".yaml"))
			if err != nil {
				t.Fatal(err)
			}
			if p.Name != test.name || p.NominalFrequencyHz != test.nominalHz || p.Overtone != test.overtone ||
				p.Condition.LoadCapacitanceFarad != test.loadF || p.Drive != nil || p.Overtones != nil || p.UnwantedModes != nil {
				t.Errorf("not the part type of the table: %+v", p)
			}
			// First-order formulas are enough to see whether the limits are sensible.
			omega := 2 * math.Pi * test.nominalHz
			merit := 1 / (omega * test.c0Farad * test.r1Ohm)
			value := map[Quantity]float64{
				FrequencyDeviation:      0,
				MotionalResistance:      test.r1Ohm,
				ResonanceResistance:     test.r1Ohm * (1 + 1/(merit*merit)),
				LoadResonanceResistance: test.r1Ohm * math.Pow(1+test.c0Farad/test.loadF, 2),
				MotionalCapacitance:     test.c1Farad,
				ShuntCapacitance:        test.c0Farad,
				QualityFactor:           1 / (omega * test.c1Farad * test.r1Ohm),
				PullingSensitivity:      -test.c1Farad / (2 * math.Pow(test.c0Farad+test.loadF, 2)) * 1e6 * 1e-12,
			}
			for _, l := range p.Limits {
				v, known := value[l.Quantity]
				if !known {
					t.Fatalf("%s: no nominal value", l.Quantity)
				}
				if b := l.Bounds.Min; b != nil && v-*b < 0.1*math.Abs(*b) {
					t.Errorf("%s: nominal %g, min %g", l.Quantity, v, *b)
				}
				if b := l.Bounds.Max; b != nil && *b-v < 0.1*math.Abs(*b) {
					t.Errorf("%s: nominal %g, max %g", l.Quantity, v, *b)
				}
			}
			if p.Condition.SeriesResonance != (test.loadF == 0) || test.loadF > 0 && p.Condition.Connection != crystal.SeriesLoad {
				t.Errorf("condition %+v", p.Condition)
			}
		})
	}
}

func TestHashIsOfTheSource(t *testing.T) {
	source := read(t, "testdata/good/everything.yaml")
	p, err := Parse("everything.yaml", source)
	if err != nil {
		t.Fatal(err)
	}
	spaced, err := Parse("everything.yaml", append(source, '\n'))
	if err != nil {
		t.Fatal(err)
	}
	if p.Hash() == spaced.Hash() {
		t.Error("another file has the same hash")
	}
}
