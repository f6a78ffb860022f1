package inspection_test

import (
	"fmt"
	"math"
	"strings"
	"testing"

	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// overtoneSection limits the third overtone in one of three definitions.
func overtoneSection(definition string, min float64) string {
	return fmt.Sprintf("\novertones:\n  - {order: 3, suppression_db: {min: %g}, definition: %s}\n", min, definition)
}

// about returns a band or window about a frequency.
func about(centre, share float64, points int) sweep.Grid {
	return sweep.Grid{StartHz: centre * (1 - share), StopHz: centre * (1 + share), Points: points}
}

// thirdOvertone is where the third overtone of the 25 MHz unit of the scenario is looked for.
func thirdOvertone() float64 { return 3 * simulated.Scenario()[2].ResonanceHz() }

// TestOvertoneSuppression: a fundamental unit whose third overtone answers, hardly answers, or does not; in windows good and bad.
func TestOvertoneSuppression(t *testing.T) {
	centre := thirdOvertone()
	full := about(centre, 0.01, 2001)
	for _, c := range []struct {
		name       string
		definition string
		min        float64
		ohm        float64 // of the overtone; 0: there is none
		offset     float64
		windows    []sweep.Grid
		noise      float64 // times that of 60 dB
		outcome    verdict.Outcome
		cause      verdict.Cause
		db         float64 // NaN: no value
	}{
		{"answers well", "resistance-ratio", 10, 40, 0.0028, []sweep.Grid{full}, 1, verdict.Violates, "", 6.936},
		{"is suppressed", "resistance-ratio", 10, 180, 0.0028, []sweep.Grid{full}, 1, verdict.Conforms, "", 20},
		{"the same in the pi-network", "pi-network-transmission", 10, 180, 0.0028, []sweep.Grid{full}, 1, verdict.Conforms, "", 13.575},
		{"the same between ports", "series-through-transmission", 10, 180, 0.0028, []sweep.Grid{full}, 1, verdict.Violates, "", 7.504},
		{"below n times the fundamental", "resistance-ratio", 10, 180, -0.004, []sweep.Grid{full}, 1, verdict.Conforms, "", 20},
		{"no trace of it", "resistance-ratio", 10, 0, 0, []sweep.Grid{full}, 1, verdict.Conforms, "", math.NaN()},
		{"no trace, in two windows", "resistance-ratio", 10, 0, 0, []sweep.Grid{about(centre*0.995, 0.006, 1001), about(centre*1.005, 0.006, 1001)}, 1, verdict.Conforms, "", math.NaN()},
		{"no window", "resistance-ratio", 10, 180, 0.0028, nil, 1, verdict.Suspended, verdict.SurveyTooCoarse, math.NaN()},
		{"a window that leaves places out", "resistance-ratio", 10, 0, 0, []sweep.Grid{about(centre, 0.006, 1201)}, 1, verdict.Suspended, verdict.SurveyTooCoarse, math.NaN()},
		{"a window too coarse to see it", "resistance-ratio", 40, 0, 0, []sweep.Grid{about(centre, 0.01, 41)}, 10, verdict.Suspended, verdict.SurveyTooCoarse, math.NaN()},
		{"something else in the window, out of reach", "resistance-ratio", 10, 40, 0.0123, []sweep.Grid{about(centre, 0.013, 2601)}, 1, verdict.Conforms, "", math.NaN()},
	} {
		t.Run(c.name, func(t *testing.T) {
			f := newFloor(t, 2, 21, overtoneSection(c.definition, c.min), about(centre, 0.014, 41))
			in := f.nominal(nil)
			if c.ohm > 0 {
				in.Unit = simulated.WithOvertone(in.Unit, 1, 3, c.offset, c.ohm)
			}
			sweeps := []sweep.Sweep{f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerDBm)}
			f.NoiseRMS *= c.noise
			for _, g := range c.windows {
				sweeps = append(sweeps, f.MeasureAt(in, g, sweep.Overtone, 3, f.SourcePowerDBm))
			}
			j := f.inspect(f.with(sweeps...))
			o := finding(j, parttype.OvertoneSuppression, -1)
			if o == nil || o.Where.Order != 3 || o.Outcome != c.outcome || c.cause != "" && causes(j) != string(c.cause) || c.cause == "" && causes(j) != "" {
				t.Fatalf("want %s with %q, got %s", c.outcome, c.cause, told(j))
			}
			if o.HasValue == math.IsNaN(c.db) || o.HasValue && math.Abs(o.Measured.Value-c.db) > 4*o.Measured.StandardUncertainty {
				t.Errorf("suppression %v, want %.3f dB", o.Measured, c.db)
			}
			if !o.HasValue {
				if c.outcome == verdict.Conforms && (len(j.Observability) != 1 || !strings.Contains(o.Text, "no response was seen") || o.ConformanceProbability < 0.95) {
					t.Errorf("what could have been seen is not said: %s %+v", o.Text, j.Observability)
				}
				return
			}
			side := map[bool]string{true: "% above 3 times the fundamental", false: "% below 3 times the fundamental"}[c.offset > 0]
			if len(j.Modes) != 1 || j.Modes[0].Order != 3 || math.Abs(j.Modes[0].MultipleRatio.Value-1-c.offset) > 1e-6 || !strings.Contains(strings.Join(j.Remarks, " "), side) {
				t.Errorf("modes %+v, remarks %q: want fn/(n f1) = %.4f, %s", j.Modes, j.Remarks, 1+c.offset, side)
			}
		})
	}
}

// TestUnseenOvertoneWouldHaveBeenSeen: what an empty window is said to show is true: overtones suppressed by a little less than the bound are found, as
// often as it says, and those far beyond it are not.
func TestUnseenOvertoneWouldHaveBeenSeen(t *testing.T) {
	centre := thirdOvertone()
	window := about(centre, 0.01, 1501)
	f := newFloor(t, 2, 22, overtoneSection("resistance-ratio", 3), about(centre, 0.014, 41))
	f.NoiseRMS *= 100 // 20 dB: the bound is near then, and the overtone still narrow
	f.base.Calibration.ReceiverNoise.RMS *= 100
	main := f.MeasureAt(f.nominal(nil), f.Window(401), sweep.Main, 0, f.SourcePowerDBm)
	j := f.inspect(f.with(main, f.MeasureAt(f.nominal(nil), window, sweep.Overtone, 3, f.SourcePowerDBm)))
	o := finding(j, parttype.OvertoneSuppression, -1)
	var bound float64
	if _, text, ok := strings.Cut(o.Text, "suppressed by less than "); !ok {
		t.Fatal(told(j))
	} else if _, err := fmt.Sscan(text, &bound); err != nil {
		t.Fatal(err)
	}
	seen := func(db float64) (n int) {
		for i := range 40 {
			in := f.nominal(nil)
			in.Unit = simulated.WithOvertone(in.Unit, 1, 3, 0.0028+1e-6*float64(i), in.Unit.Modes[0].ResistanceOhm*math.Pow(10, db/20))
			j := f.inspect(f.with(main, f.MeasureAt(in, window, sweep.Overtone, 3, f.SourcePowerDBm)))
			if o := finding(j, parttype.OvertoneSuppression, -1); !strings.Contains(o.Text, "no response was seen") {
				n++
			}
		}
		return n
	}
	near, far := seen(bound-1), seen(bound+12)
	t.Logf("bound %.1f dB: %d of 40 seen 1 dB above it, %d of 40 seen 12 dB below", bound, near, far)
	if near < 36 || far > 4 {
		t.Errorf("bound %.1f dB: %d of 40 seen 1 dB above it, want at least 36; %d of 40 seen 12 dB below, want at most 4", bound, near, far)
	}
}

// TestOvertoneUnit: of a unit for its third overtone the fundamental and the fifth are held against the main mode, and multiples are told by the
// measured fundamental.
func TestOvertoneUnit(t *testing.T) {
	const section = `
overtones:
  - {order: 1, suppression_db: {max: 10}, definition: resistance-ratio}
  - {order: 5, suppression_db: {min: 3}, definition: resistance-ratio}
`
	k := simulated.Scenario()[3]
	f1, f5 := k.ResonanceHz()/3, k.ResonanceHz()/3*5
	f := newFloor(t, 3, 23, section, about(f1, 0.014, 41), about(f5, 0.014, 41))
	u := f.Kind.Nominal()
	u = simulated.WithOvertone(u, 3, 1, -0.0027, 8)
	u = simulated.WithOvertone(u, 3, 5, 0.0003, 70)
	in := simulated.Insert{Unit: u}
	j := f.inspect(f.with(
		f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerDBm),
		f.MeasureAt(in, about(f1, 0.01, 2001), sweep.Overtone, 1, f.SourcePowerDBm),
		f.MeasureAt(in, about(f5, 0.01, 2001), sweep.Overtone, 5, f.SourcePowerDBm),
	))
	if j.Verdict != verdict.Pass || len(j.Modes) != 2 {
		t.Fatal(told(j))
	}
	for _, m := range j.Modes {
		want := map[int][3]float64{1: {20 * math.Log10(8.0/32), 1 / (1 - 0.0027), 0}, 5: {20 * math.Log10(70.0/32), (1 + 0.0003) / (1 - 0.0027), 0}}[m.Order]
		if math.Abs(m.SuppressionDB.Value-want[0]) > 4*m.SuppressionDB.StandardUncertainty || math.Abs(m.MultipleRatio.Value-want[1]) > 1e-6 {
			t.Errorf("order %d: %+v, fn/(n f1) %.6f, want %.3f dB and %.6f", m.Order, m, m.MultipleRatio.Value, want[0], want[1])
		}
	}
	if o := j.Order; o == nil || o.Order != 3 || o.Probability < 0.99 || len(o.Responses) != 3 || o.Responses[1].Order != 1 || o.Responses[2].Order != 5 {
		t.Errorf("order %+v", o)
	}
}

// TestFlexuralOvertone: a window at a ratio of frequencies, where whole multiples mean nothing.
func TestFlexuralOvertone(t *testing.T) {
	centre := 6.27 * simulated.Scenario()[0].ResonanceHz()
	f := newFloor(t, 0, 24, "\novertones:\n  - {frequency_ratio: 6.27, suppression_db: {min: 6}, definition: resistance-ratio}\n", about(centre, 0.014, 41))
	in := f.nominal(nil)
	in.Unit = simulated.WithRatio(in.Unit, 6.27*1.004, 150e3, 2e-15)
	window := f.MeasureAt(in, about(centre, 0.01, 2001), sweep.Overtone, 0, f.SourcePowerDBm)
	window.FrequencyRatio = 6.27
	j := f.inspect(f.with(f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerDBm), window))
	o := finding(j, parttype.OvertoneSuppression, -1)
	if want := 20 * math.Log10(150.0/38); o == nil || o.Where.FrequencyRatio != 6.27 || math.Abs(o.Measured.Value-want) > 4*o.Measured.StandardUncertainty+0.05 || j.Verdict != verdict.Pass {
		t.Errorf("want %.2f dB, got %s", want, told(j))
	}
	if len(j.Modes) != 1 || j.Modes[0].MultipleRatio != nil {
		t.Errorf("modes %+v", j.Modes)
	}
}

// TestShuntCapacitance: away from its modes a unit shows another C0 than in the window of its main mode, where neighbours look like a part of it; the
// limit holds for the former where it was measured.
func TestShuntCapacitance(t *testing.T) {
	main := simulated.Scenario()[2].ResonanceHz()
	band := about(main*0.9, 0.002, 21)
	f := newFloor(t, 2, 25, "", band)
	f.NoiseRMS /= 30
	f.base.Calibration.ReceiverNoise.RMS /= 30
	for i := range f.base.Calibration.Standards { // an open known to a tenth of what the others know, so that a hundredth of a picofarad shows
		f.base.Calibration.Standards[i].CapacitanceUncertaintyFarad /= 10
	}
	// A strong neighbour 0.4 % below the main mode adds C/(1 - (f/fn)^2) to its surroundings, here a negative capacitance.
	in := f.nominal(func(m *crystal.Mode, u *crystal.Unit) {
		neighbour := crystal.ModeFromCapacitance(m.ResonanceHz*0.996, 30, 2e-15)
		u.Modes = append(u.Modes, neighbour)
	})
	sweeps := []sweep.Sweep{
		f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerDBm),
		f.MeasureAt(in, about(main*0.9, 0.0015, 41), sweep.ShuntCapacitance, 0, f.SourcePowerDBm),
	}
	j := f.inspect(f.with(sweeps...))
	away, apparent := j.ShuntCapacitanceFarad, j.Main.ShuntCapacitanceFarad
	if away == nil {
		t.Fatal(told(j))
	}
	// Below all modes the static part of the neighbour is added: 2 fF/(1 - 0.81).
	want := f.Kind.ShuntFarad + 2e-15/(1-math.Pow(0.9/0.996, 2))
	if math.Abs(away.Value-want) > 3*away.StandardUncertainty || away.StandardUncertainty > 0.007e-12 {
		t.Errorf("C0 away from modes %v, want %.4g F", *away, want)
	}
	if shift := apparent.Value - away.Value; shift > -0.15e-12 {
		t.Errorf("the apparent C0 %v lies %.2g F from that away from modes: want some tenths of a picofarad below", apparent, shift)
	}
	if c0 := finding(j, parttype.ShuntCapacitance, -1); c0.Measured.Value != away.Value {
		t.Errorf("the limit was held against %v", c0.Measured)
	}
	if c0 := finding(f.inspect(f.with(sweeps[0])), parttype.ShuntCapacitance, -1); math.Abs(c0.Measured.Value-apparent.Value) > 1e-15 {
		t.Errorf("without a sweep away from modes the limit was held against %v", c0.Measured)
	}
}

// TestTemperature: readings of frequency are referred to where the limits hold, by the curve and with its uncertainty.
func TestTemperature(t *testing.T) {
	const section = `
limits:
  frequency_deviation_ppm: {of: motional_resonance, min: -300, max: 300}
temperature: {reference_c: 25, allowed_c: {min: 15, max: 35}, curve: {first: -0.2, second: -0.03, third: 1.0e-4, standard_uncertainty_percent: 20}}
`
	cut := simulated.Cut{ReferenceC: 25, First: -0.2, Second: -0.03, Third: 1e-4}
	f := newFloor(t, 2, 26, section)
	deviation := func(celsius, u float64) *verdict.Judgement {
		in := simulated.Insert{Unit: cut.At(f.Kind.Nominal(), celsius)}
		c := f.with(f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerDBm))
		if u >= 0 {
			c.Begin.Temperature = &inspection.Temperature{Celsius: celsius, StandardUncertainty: u}
		}
		return f.inspect(c)
	}
	at25 := finding(deviation(25, 0.2), parttype.FrequencyDeviation, -1).Measured
	j := deviation(33, 0.2)
	warm := finding(j, parttype.FrequencyDeviation, -1).Measured
	shift := -0.2*8 - 0.03*64 + 1e-4*512
	if math.Abs(warm.Value-at25.Value) > 0.02 {
		t.Errorf("at 33 degrees the deviation reads %.3f ppm, at 25 %.3f ppm", warm.Value, at25.Value)
	}
	slope := -0.2 - 2*0.03*8 + 3*1e-4*64
	want := math.Sqrt(math.Pow(at25.StandardUncertainty, 2) - math.Pow(0.2*0.2, 2) + math.Pow(0.2*slope, 2) + math.Pow(0.2*shift, 2))
	if math.Abs(warm.StandardUncertainty/want-1) > 0.05 {
		t.Errorf("at 33 degrees uncertain by %.4f ppm, want %.4f", warm.StandardUncertainty, want)
	}
	if !strings.Contains(strings.Join(j.Remarks, " "), "referred by 3.5 ± 1.4 ppm") {
		t.Errorf("remarks %q", j.Remarks)
	}
	raw := finding(deviation(33, -1), parttype.FrequencyDeviation, -1).Measured
	if math.Abs(raw.Value-at25.Value-shift) > 0.02 {
		t.Errorf("without a temperature the deviation reads %.3f ppm, want %.3f", raw.Value, at25.Value+shift)
	}
	if j := deviation(41, 0.2); causes(j) != string(verdict.TemperatureOutOfRange) || j.Verdict != verdict.Retest {
		t.Errorf("at 41 degrees: %s", told(j))
	}
}

// TestReach: an inspection that its calibration cannot serve is refused by name before a unit is measured.
func TestReach(t *testing.T) {
	centre := thirdOvertone()
	for _, c := range []struct {
		name  string
		bands []sweep.Grid
		ok    bool
	}{
		{"in reach", []sweep.Grid{about(centre, 0.014, 41)}, true},
		{"in reach by two bands", []sweep.Grid{about(centre*0.995, 0.006, 21), about(centre*1.005, 0.006, 21)}, true},
		{"a gap between", []sweep.Grid{about(centre*0.994, 0.005, 21), about(centre*1.006, 0.005, 21)}, false},
		{"the main band alone", nil, false},
	} {
		f := newFloor(t, 2, 27, overtoneSection("resistance-ratio", 10), c.bands...)
		err := inspection.CheckReach(f.base.PartType, f.base.Calibration)
		if (err == nil) != c.ok || !c.ok && !strings.Contains(err.Error(), "part_type.overtones[0]") {
			t.Errorf("%s: %v", c.name, err)
		}
		if c.ok {
			continue
		}
		in := f.nominal(nil)
		j := f.inspect(f.with(f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerDBm), f.MeasureAt(in, about(centre, 0.01, 2001), sweep.Overtone, 3, f.SourcePowerDBm)))
		if causes(j) != string(verdict.CalibrationMismatch) || finding(j, parttype.MotionalResistance, -1).Outcome != verdict.Conforms {
			t.Errorf("%s, swept already: %s", c.name, told(j))
		}
	}
}
