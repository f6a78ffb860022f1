package parttype

import (
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"example.com/admit/service/crystal"
	"example.com/admit/service/parttype/document"
)

func at(v float64) *float64 { return &v }

// everything is what testdata/good/everything.yaml says, written down a second time by hand.
func everything() *PartType {
	return &PartType{
		Name: "TM-25M000-F10", Version: 3, VibrationMode: ThicknessShear, Overtone: 1, NominalFrequencyHz: 25e6, CalibrationRequired: true,
		Condition:      CircuitCondition{LoadCapacitanceFarad: 10e-12, Connection: crystal.SeriesLoad},
		DriveLevelWatt: 10e-6, MaximumDriveWatt: 200e-6,
		Temperature: &Temperature{ReferenceC: 25, AllowedC: Bounds{at(23), at(27)}, Curve: [3]float64{-0.1, 0.002, 1.1e-4}, CurveUncertaintyPercent: 20},
		Limits: []Limit{
			{Quantity: FrequencyDeviation, Of: LoadResonance, Bounds: Bounds{at(-10), at(10)}, Decide: Decide{GuardedBoth, 0.99}},
			{Quantity: MotionalResistance, Bounds: Bounds{Max: at(40)}},
			{Quantity: ResonanceResistance, Bounds: Bounds{Max: at(40)}},
			{Quantity: LoadResonanceResistance, Bounds: Bounds{Max: at(60)}, Decide: Decide{Rule: Simple}},
			{Quantity: MotionalCapacitance, Bounds: Bounds{at(4e-15), at(9e-15)}},
			{Quantity: ShuntCapacitance, Bounds: Bounds{Max: at(4e-12)}},
			{Quantity: QualityFactor, Bounds: Bounds{Min: at(25000)}},
			{Quantity: PullingSensitivity, Bounds: Bounds{at(-30), at(-10)}},
			{Quantity: PullingRange, Bounds: Bounds{Min: at(40)}, FromFarad: 8e-12, ToFarad: 12e-12},
			{Quantity: StartMargin, Bounds: Bounds{Min: at(5)}, NegativeResistanceOhm: -400},
		},
		Drive: &Drive{
			LevelsWatt: []float64{100e-9, 1e-6, 10e-6, 100e-6, 100e-9}, TolerancePercent: 15, WaitSeconds: 0.3,
			ResistanceRatio: []RatioLimit{{30, 1.4}, {60, 1.2}}, ResistanceRatioDecide: Decide{Rule: Simple},
			MotionalResistance: Bounds{Max: at(60)}, MotionalResistanceDecide: Decide{Confidence: 0.9},
			FrequencyShiftPPM: Bounds{Max: at(2)}, FrequencyShiftDecide: Decide{Rule: GuardedRejection},
			ReturnSteps: []int{0, 4}, ReturnShiftPPM: Bounds{Max: at(0.5)}, ReturnShiftDecide: Decide{Confidence: 0.8},
		},
		Overtones: []OvertoneLimit{
			{Order: 3, SuppressionDB: Bounds{Min: at(10)}, Definition: ResistanceRatio},
			{FrequencyRatio: 6.27, SuppressionDB: Bounds{at(6), at(60)}, Decide: Decide{Rule: Simple}, Definition: PiNetworkTransmission},
		},
		UnwantedModes: []UnwantedLimit{{FromHz: -100e3, ToHz: 500e3, MinimumWidthHz: 50, SuppressionDB: Bounds{Min: at(3)},
			Decide: Decide{Confidence: 0.9}, Definition: SeriesThroughTransmission}},
		Decision: Decision{GuardedRejection, 0.975, 3, Fail},
		Grades: &Grades{Adjacent: true, Of: []Grade{
			{Name: "A", Limits: []Limit{{Quantity: FrequencyDeviation, Of: LoadResonance, Bounds: Bounds{at(-5), at(5)}}}},
			{Name: "B"},
		}},
	}
}

func TestGoodFiles(t *testing.T) {
	tests := []struct {
		file, source string
		want         *PartType
	}{
		{"everything.yaml", "design of the limits file: every key of the grammar", everything()},
		{"defaults.yaml", "design of the limits file: defaults", &PartType{
			Name: "TM-50M000-T3", Version: 1, VibrationMode: ThicknessShear, Overtone: 3, NominalFrequencyHz: 50e6, CalibrationRequired: true,
			Condition: CircuitCondition{SeriesResonance: true}, DriveLevelWatt: 100e-6, MaximumDriveWatt: 0.5e-3,
			Drive:    &Drive{LevelsWatt: []float64{1e-6, 100e-6}, TolerancePercent: 15, WaitSeconds: 0.3, ResistanceRatio: []RatioLimit{{0, 1.4}}},
			Decision: Decision{GuardedAcceptance, 0.95, 2, SetAside},
		}},
		{"writing.yaml", "YAML 1.2: the same value in other styles; SI Brochure 9: the symbols of mu and ohm", &PartType{
			Name: "0815", Version: 1, VibrationMode: Flexure, Overtone: 2, NominalFrequencyHz: 32768, CalibrationRequired: true,
			Condition:      CircuitCondition{LoadCapacitanceFarad: 7e-12, Connection: crystal.ParallelLoad},
			DriveLevelWatt: 1e-7, MaximumDriveWatt: 1e-6,
			Limits: []Limit{
				{Quantity: MotionalResistance, Bounds: Bounds{Max: at(50e3)}},
				{Quantity: ResonanceResistance, Bounds: Bounds{Max: at(50e3)}},
				{Quantity: QualityFactor, Bounds: Bounds{at(2e4), at(1.5e5)}},
			},
			Decision: Decision{GuardedAcceptance, 0.95, 2, SetAside},
			Grades:   &Grades{Of: []Grade{{Name: "only"}}},
		}},
	}
	for _, test := range tests {
		t.Run(test.file, func(t *testing.T) {
			source := read(t, "testdata/good/"+test.file)
			got, err := Parse(test.file, source)
			if err != nil {
				t.Fatal(err)
			}
			test.want.Source = source
			if diff := cmp.Diff(test.want, got); diff != "" {
				t.Errorf("(-want +got)\n%s", diff)
			}
			source[0] ^= 1
			if got.Source[0] == source[0] {
				t.Error("the part type shares the caller's bytes")
			}
		})
	}
}

// Each bad file says at its head which faults it must give, in order; it must give those and no others.
func TestBadFiles(t *testing.T) {
	files, err := filepath.Glob("testdata/bad/*.yaml")
	if err != nil || len(files) < 20 {
		t.Fatalf("found %d bad files: %v", len(files), err)
	}
	for _, file := range files {
		t.Run(filepath.Base(file), func(t *testing.T) {
			source := read(t, file)
			var want []string
			for line := range strings.Lines(string(source)) {
				if fault, found := strings.CutPrefix(line, "# fault: "); found {
					want = append(want, strings.TrimSuffix(fault, "\n"))
				}
			}
			p, err := Parse(filepath.Base(file), source)
			var faults document.Faults
			if !errors.As(err, &faults) || p != nil || len(want) == 0 {
				t.Fatalf("got %v and error %v, with %d faults wanted", p, err, len(want))
			}
			for i := range max(len(faults), len(want)) {
				switch {
				case i >= len(faults):
					t.Errorf("no fault, want %s", want[i])
				case i >= len(want):
					t.Errorf("a further fault %s", faults[i])
				case !strings.Contains(faults[i].Error(), want[i]):
					t.Errorf("got  %s\nwant %s", faults[i], want[i])
				}
			}
		})
	}
}

// Cutting, doubling and replacing pieces of a whole file is what editors and cables do to it: never a panic, and never a part type whose
// numbers cannot be.
func FuzzParse(f *testing.F) {
	for _, pattern := range []string{"testdata/good/*.yaml", "testdata/bad/*.yaml", "../../fixtures/simulated/part_types/*.yaml"} {
		files, err := filepath.Glob(pattern)
		if err != nil || len(files) == 0 {
			f.Fatalf("no seeds %s: %v", pattern, err)
		}
		for _, file := range files {
			source, err := os.ReadFile(file)
			if err != nil {
				f.Fatal(err)
			}
			f.Add(source)
		}
	}
	f.Fuzz(func(t *testing.T, source []byte) {
		p, err := Parse("fuzz.yaml", source)
		var faults document.Faults
		switch {
		case err == nil:
			checkPossible(t, p)
		case !errors.As(err, &faults) || len(faults) == 0 || p != nil:
			t.Fatalf("part type %v, error %#v", p, err)
		}
	})
}

// checkPossible holds a parsed part type against what every user of it relies on.
func checkPossible(t *testing.T, p *PartType) {
	t.Helper()
	if p.Name == "" || p.Version < 1 || p.Overtone < 1 || !(p.NominalFrequencyHz >= 1) || !(p.DriveLevelWatt > 0) ||
		!(p.MaximumDriveWatt >= p.DriveLevelWatt) || p.Decision.Attempts < 1 || p.Decision.Attempts > 9 ||
		!(p.Decision.Confidence >= 0.5 && p.Decision.Confidence <= 0.9999) || len(p.Source) == 0 {
		t.Errorf("impossible: %+v", p)
	}
	if p.Condition.SeriesResonance == (p.Condition.LoadCapacitanceFarad > 0) {
		t.Errorf("neither or both conditions: %+v", p.Condition)
	}
	for _, l := range p.Limits {
		b := l.Bounds
		if b.Min == nil && b.Max == nil || b.Min != nil && b.Max != nil && !(*b.Min < *b.Max) {
			t.Errorf("%s: no interval", l.Quantity)
		}
		if (l.Quantity == FrequencyDeviation) == (l.Of == "") || p.Condition.SeriesResonance && l.Of == LoadResonance {
			t.Errorf("%s of %q", l.Quantity, l.Of)
		}
	}
	if d := p.Drive; d != nil {
		for _, level := range d.LevelsWatt {
			if !(level > 0 && level <= p.MaximumDriveWatt) {
				t.Errorf("drive level %g W of at most %g W", level, p.MaximumDriveWatt)
			}
		}
		for _, step := range d.ReturnSteps {
			if step >= len(d.LevelsWatt) {
				t.Errorf("step %d of %d levels", step, len(d.LevelsWatt))
			}
		}
	}
}

func read(t *testing.T, file string) []byte {
	t.Helper()
	source, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	return source
}
