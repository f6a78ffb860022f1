package report

import (
	"flag"
	"os"
	"strings"
	"testing"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
)

var update = flag.Bool("update", false, "rewrite the golden files")

// example is a failed unit with everything that a report can show of a main sweep.
func example() *inspection.Record {
	limit := 40.0
	r := &inspection.Record{Sequence: 17, Attempt: 2}
	r.Begin = inspection.Begin{
		Purpose: inspection.Engineering, Unit: inspection.UnitID{Serial: "TM0000123", Lot: "L2601"}, Station: "N1", ContactHead: "N1-A",
		Calibration: "N1-A-2026-11-30", MeasuredAt: time.Date(2026, 11, 30, 9, 12, 44, 0, time.UTC),
	}
	r.Begin.ID, _ = inspection.ParseID("018f3a52-7d3c-7a11-9c55-0123456789ab")
	r.PartType.Name, r.PartType.Version = "TM-25M000-F10", 1
	v := func(value, u float64) verdict.Value { return verdict.Value{Value: value, StandardUncertainty: u} }
	p := func(value, u float64) *verdict.Value { x := v(value, u); return &x }
	r.Judgement = verdict.Judgement{
		Verdict: verdict.Fail,
		Findings: []verdict.Finding{
			{Quantity: parttype.MotionalResistance, Where: verdict.Nowhere, Bounds: parttype.Bounds{Max: &limit}, Outcome: verdict.Violates, Text: "Motional resistance 48.20 ± 0.62 Ω (k = 2), limit at most 40 Ω: out of limit"},
			{Quantity: parttype.QualityFactor, Where: verdict.Nowhere, Outcome: verdict.Conforms, Text: "Quality factor 61234 ± 440 (k = 2), limit at least 25000: conforms"},
		},
		Main: &verdict.Main{
			MotionalResonanceHz: v(24994075.4, 0.9), MotionalResistanceOhm: v(48.2, 0.31), MotionalInductanceHenry: v(7.372e-3, 18e-6),
			MotionalCapacitanceFarad: v(5.5e-15, 13e-18), ShuntCapacitanceFarad: v(1.6e-12, 16e-15), QualityFactor: v(61234, 220),
			FigureOfMerit: v(219.8, 2.3), ParallelResonanceHz: v(25036750, 420), ResonanceHz: p(24994076.3, 0.9), ResonanceResistanceOhm: p(48.21, 0.31),
		},
		Load: &verdict.Load{
			LoadCapacitanceFarad: 10e-12, Connection: "series", LoadResonanceHz: v(24999996, 14), LoadResonanceResistanceOhm: v(64.9, 0.4),
			PullingSensitivityPPMPerPF: v(-20.4, 0.065),
		},
		Quality: &verdict.Quality{SNRDecibel: 60, ResidualCorrelation: -0.015, SettlingTimeConstants: 10},
		Budget: []verdict.BudgetLine{
			{Source: "noise", MotionalResonanceHz: 0.069, MotionalResistanceOhm: 0.0063, MotionalInductanceHenry: 1.1e-6, ShuntCapacitanceFarad: 5.8e-15},
			{Source: "contact", MotionalResistanceOhm: 0.05},
		},
		Remarks: []string{"3 of 401 points lie far from the fitted curve and carry little weight."},
	}
	return r
}

// TestGolden: the whole text, letter by letter.
func TestGolden(t *testing.T) {
	var out strings.Builder
	if err := Record(&out, example()); err != nil {
		t.Fatal(err)
	}
	const file = "testdata/fail.txt"
	if *update {
		if err := os.WriteFile(file, []byte(out.String()), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	if out.String() != string(want) {
		t.Errorf("the report differs from %s (run with -update and read the difference):\n%s", file, out.String())
	}
}

// TestUnknownScale: without a known network no ohm is printed.
func TestUnknownScale(t *testing.T) {
	r := example()
	r.Judgement.ScaleUnknown, r.Judgement.Load, r.Judgement.Findings, r.Judgement.Budget = true, nil, nil, nil
	var out strings.Builder
	if err := Record(&out, r); err != nil {
		t.Fatal(err)
	}
	if strings.Contains(out.String(), "Ω") || !strings.Contains(out.String(), "the fixture network is unknown") {
		t.Errorf("%s", out.String())
	}
}
