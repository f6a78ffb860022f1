package inspection_test

import (
	"errors"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// driveSection is the drive section of the limits file's own documentation.
const driveSection = `
drive:
  levels: [100 nW, 1 uW, 10 uW, 100 uW, 100 nW]
  tolerance_percent: 15
  wait: 300 ms
  resistance_ratio: {reference: nominal-level, max: [{up_to: 30 ohm, max: 1.4}, {up_to: 60 ohm, max: 1.2}]}
  motional_resistance: {max: 60 ohm}
  frequency_shift_ppm: {max: 2}
  return_shift_ppm: {steps: [0, 4], max: 0.5}
`

// sleeping returns a unit that sleeps until it is driven above 3 uW.
func (f *floor) sleeping(ratio float64) simulated.Insert {
	in := f.nominal(nil)
	in.Drive = &simulated.DriveLaw{SleepRatio: ratio, WakeWatt: 3e-6, Forgets: true}
	return in
}

// TestDriveSeries: what each unit, and each station, comes to.
func TestDriveSeries(t *testing.T) {
	type want struct {
		verdict verdict.Verdict
		cause   verdict.Cause
		finding parttype.Quantity // that is violated, at a step
		step    int
		remark  string
	}
	for _, c := range []struct {
		name   string
		sweeps func(f *floor) []sweep.Sweep
		want   want
	}{
		{"as it should be", func(f *floor) []sweep.Sweep { return f.series(f.nominal(nil)) }, want{verdict: verdict.Pass}},
		{"resistance rises with the level", func(f *floor) []sweep.Sweep {
			in := f.nominal(nil)
			in.Drive = &simulated.DriveLaw{ResistancePerWatt: 0.6 / 100e-6}
			return f.series(in)
		}, want{verdict.Fail, "", parttype.DriveResistanceRatio, 3, ""}},
		{"resistance above the limit of the series alone", func(f *floor) []sweep.Sweep {
			f.base.PartType.Drive.MotionalResistance.Max = pointer(17.0)
			return f.series(f.nominal(nil))
		}, want{verdict.Fail, "", parttype.DriveMotionalResistance, 2, ""}},
		{"frequency follows the level", func(f *floor) []sweep.Sweep {
			in := f.nominal(nil)
			in.Drive = &simulated.DriveLaw{FrequencyPPMPerWatt: -4 / 100e-6}
			return f.series(in)
		}, want{verdict.Fail, "", parttype.DriveFrequencyShift, 3, ""}},
		{"frequency does not return", func(f *floor) []sweep.Sweep {
			in := f.nominal(nil)
			in.Drive = &simulated.DriveLaw{StrainPPM: 1.2, StrainWatt: 50e-6}
			return f.series(in)
		}, want{verdict.Fail, "", parttype.DriveReturnShift, 4, ""}},
		{"sleeps, and strong drive cures it", func(f *floor) []sweep.Sweep { return f.series(f.sleeping(8)) },
			want{verdict.Retest, verdict.HighResistanceAtLowDrive, "", 0, "strong drive cured it"}},
		{"sleeps by ratio alone", func(f *floor) []sweep.Sweep { return f.series(f.sleeping(2)) },
			want{verdict.Retest, verdict.HighResistanceAtLowDrive, "", 0, "The unit sleeps"}},
		{"sleeps, and the station stops at once", func(f *floor) []sweep.Sweep { return f.series(f.sleeping(8))[:1] },
			want{verdict.Retest, verdict.HighResistanceAtLowDrive, "", 0, ""}},
		{"sleeps, and the source was set for the resistance it then shows", func(f *floor) []sweep.Sweep {
			in := f.sleeping(8)
			louder := f.SourcePowerFor(100e-9) + 2.86 // dB: what 144 ohm take less than 18 ohm, 10 log10 of R/(R + 25)^2
			return []sweep.Sweep{f.MeasureAt(in, f.Window(201), sweep.Drive, 0, louder)}
		}, want{verdict.Retest, verdict.HighResistanceAtLowDrive, "", 0, ""}},
		{"high at every level", func(f *floor) []sweep.Sweep {
			return f.series(f.nominal(func(m *crystal.Mode, _ *crystal.Unit) { m.ResistanceOhm *= 5 }))
		}, want{verdict.Fail, verdict.HighResistanceAtLowDrive, parttype.MotionalResistance, -1, ""}},
		{"a level missed", func(f *floor) []sweep.Sweep {
			all := f.series(f.nominal(nil))
			all[1] = f.MeasureAt(f.nominal(nil), f.Window(201), sweep.Drive, 1, f.SourcePowerFor(1e-6)+1)
			return all
		}, want{verdict.Retest, verdict.DriveLevelMissed, "", 0, ""}},
		{"every level missed", func(f *floor) []sweep.Sweep {
			f.base.Calibration.SourceLevelOffsetDB = -3
			return f.series(f.nominal(nil))
		}, want{verdict.Retest, verdict.DriveLevelMissed, "", 0, ""}},
		{"a level not measured", func(f *floor) []sweep.Sweep { return slices.Delete(f.series(f.nominal(nil)), 4, 5) },
			want{verdict.Retest, verdict.DriveLevelMissed, "", 0, ""}},
		{"no source power stated", func(f *floor) []sweep.Sweep {
			all := f.series(f.nominal(nil))
			all[0].SourcePowerDBm = nil
			return all
		}, want{verdict.Retest, verdict.DriveLevelMissed, "", 0, ""}},
		{"from the highest level down", func(f *floor) []sweep.Sweep {
			all := f.series(f.nominal(nil))
			slices.Reverse(all)
			return all
		}, want{verdict.Retest, verdict.DriveOrderBroken, "", 0, ""}},
		{"one step twice", func(f *floor) []sweep.Sweep {
			all := f.series(f.nominal(nil))
			return slices.Insert(all, 1, all[0])
		}, want{verdict.Retest, verdict.DriveOrderBroken, "", 0, ""}},
		{"the main sweep first, at its own level", func(f *floor) []sweep.Sweep {
			all := f.series(f.nominal(nil))
			main := all[3]
			return slices.Insert(slices.Delete(all, 3, 4), 0, main)
		}, want{verdict.Retest, verdict.DriveOrderBroken, "", 0, ""}},
		{"the main sweep first, at the lowest level", func(f *floor) []sweep.Sweep {
			all := slices.Delete(f.series(f.nominal(nil)), 3, 4)
			return slices.Insert(all, 0, f.MeasureAt(f.nominal(nil), f.Window(401), sweep.Main, 0, f.SourcePowerFor(100e-9)))
		}, want{verdict: verdict.Pass}},
		{"the contact jumps between two sweeps", func(f *floor) []sweep.Sweep {
			all := f.series(f.nominal(nil))
			in := f.nominal(nil)
			in.ContactOhm = 1.5
			all[3] = f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerDBm)
			return all
		}, want{verdict.Retest, verdict.UnstableContact, "", 0, ""}},
	} {
		t.Run(c.name, func(t *testing.T) {
			f := newFloor(t, 2, 11, driveSection)
			j := f.inspect(f.with(c.sweeps(f)...))
			if j.Verdict != c.want.verdict || c.want.cause != "" && !strings.Contains(causes(j), string(c.want.cause)) || c.want.verdict == verdict.Pass && causes(j) != "" {
				t.Errorf("want %s with %q, got %s", c.want.verdict, c.want.cause, told(j))
			}
			if q := c.want.finding; q != "" {
				if v := finding(j, q, c.want.step); v == nil || v.Outcome != verdict.Violates {
					t.Errorf("want %s violated at step %d, got %s", q, c.want.step, told(j))
				}
			}
			if c.want.remark != "" && !strings.Contains(strings.Join(j.Remarks, " "), c.want.remark) {
				t.Errorf("no remark says %q: %q", c.want.remark, j.Remarks)
			}
		})
	}
}

func pointer(v float64) *float64 { return &v }

// TestDriveReadings: one finding a level for each limit, and a reading of each level whose power, R1 and fs are those of the simulation.
func TestDriveReadings(t *testing.T) {
	f := newFloor(t, 2, 12, driveSection)
	in := f.nominal(nil)
	in.Drive = &simulated.DriveLaw{ResistancePerWatt: 0.2 / 100e-6, FrequencyPPMPerWatt: 1 / 100e-6}
	j := f.inspect(f.with(f.series(in)...))
	levels := f.base.PartType.Drive.LevelsWatt
	if len(j.Drive) != len(levels) {
		t.Fatalf("%d readings for %d levels: %s", len(j.Drive), len(levels), told(j))
	}
	main := in.Unit.Modes[0]
	for k, watt := range levels {
		d := j.Drive[k]
		ohm := main.ResistanceOhm * (1 + in.Drive.ResistancePerWatt*watt)
		// The source is set for the nominal R1; what another takes follows from R/(R + 25)^2.
		if want := watt * share(ohm) / share(main.ResistanceOhm); d.Step != k || math.Abs(d.PowerWatt.Value/want-1) > 0.02 {
			t.Errorf("step %d: power %g W, want %g W", k, d.PowerWatt.Value, want)
		}
		if r := d.PowerWatt.StandardUncertainty / d.PowerWatt.Value; r < 0.022 || r > 0.03 {
			t.Errorf("step %d: power uncertain by %.3f, want the 0.023 of 0.1 dB and little more", k, r)
		}
		if off := d.MotionalResistanceOhm.Value - ohm; math.Abs(off) > 4*d.MotionalResistanceOhm.StandardUncertainty {
			t.Errorf("step %d: R1 %g ± %g, want about %g", k, d.MotionalResistanceOhm.Value, d.MotionalResistanceOhm.StandardUncertainty, ohm)
		}
		for _, q := range []parttype.Quantity{parttype.DriveResistanceRatio, parttype.DriveMotionalResistance, parttype.DriveFrequencyShift} {
			if finding(j, q, k) == nil {
				t.Errorf("step %d: no finding of %s", k, q)
			}
		}
	}
	shift := finding(j, parttype.DriveFrequencyShift, 3)
	if math.Abs(shift.Measured.Value-0.9) > 0.05 || *shift.Bounds.Min != -2 || *shift.Bounds.Max != 2 {
		t.Errorf("shift at step 3 %v within %v: want about 0.9 ppm in -2..2", shift.Measured, shift.Bounds)
	}
}

// share is the power in a resistance in the pi-network, but for a factor.
func share(ohm float64) float64 { return ohm / ((ohm + 25) * (ohm + 25)) }

// TestRatioKeepsCommonTermsCommon: stations whose standards, gain and phase are off by what their calibrations state, each unit with a true ratio of one.
// R1 itself is off by much more than its noise; the ratio of two levels is not, and its stated uncertainty is right, neither too small nor that of two
// resistances with nothing in common.
func TestRatioKeepsCommonTermsCommon(t *testing.T) {
	var ratio, resistance []float64
	for seed := range uint64(60) {
		f := newFloor(t, 2, 100+seed, driveSection)
		rng := rand.New(rand.NewPCG(seed, 5))
		f.Fixture.Gain *= complex(math.Pow(10, 0.02*rng.NormFloat64()/20), 0)
		in := f.nominal(nil)
		in.ContactOhm = 0.05 * rng.NormFloat64()
		j := f.inspect(f.with(f.series(in)...))
		r, level := finding(j, parttype.DriveResistanceRatio, 3), finding(j, parttype.DriveMotionalResistance, 3)
		if r == nil || !r.HasValue || !level.HasValue {
			t.Fatal(told(j))
		}
		ratio = append(ratio, (r.Measured.Value-1)/r.Measured.StandardUncertainty)
		resistance = append(resistance, (level.Measured.Value-in.Unit.Modes[0].ResistanceOhm)/level.Measured.StandardUncertainty)
		if apart := math.Sqrt2 * level.Measured.StandardUncertainty / level.Measured.Value; r.Measured.StandardUncertainty > apart/4 {
			t.Fatalf("the ratio is uncertain by %.2g, two resistances apart would be by %.2g", r.Measured.StandardUncertainty, apart)
		}
	}
	for name, z := range map[string][]float64{"ratio": ratio, "resistance": resistance} {
		if got := rms(z); got < 0.7 || got > 1.3 {
			t.Errorf("%s: rms error over stated uncertainty %.2f, want 1 within 0.3", name, got)
		}
	}
}

func rms(z []float64) float64 {
	var sum float64
	for _, v := range z {
		sum += v * v
	}
	return math.Sqrt(sum / float64(len(z)))
}

// TestDriveCeiling: a source power that could drive any unit beyond the maximum is refused by name, whatever was found; so is a step that does not exist.
func TestDriveCeiling(t *testing.T) {
	f := newFloor(t, 2, 13, driveSection)
	for _, c := range []struct {
		name   string
		change func(all []sweep.Sweep)
		field  string
		words  []string
	}{
		{"a drive sweep", func(all []sweep.Sweep) { all[4].SourcePowerDBm = pointer(f.SourcePowerFor(100e-6) + 6) }, "sweeps[4].source_power_dbm", []string{"maximum_drive_level", "0.0002"}},
		{"the main sweep", func(all []sweep.Sweep) { all[3].SourcePowerDBm = pointer(30) }, "sweeps[3].source_power_dbm", []string{"30 dBm"}},
		{"a step that does not exist", func(all []sweep.Sweep) { all[5].DriveStep = 5 }, "sweeps[5].drive_step", []string{"0 to 4"}},
	} {
		all := f.series(f.nominal(nil))
		c.change(all)
		_, err := f.judge.Judge(t.Context(), f.with(all...))
		var fault *inspection.Fault
		if !errors.As(err, &fault) || fault.Kind != inspection.Malformed || fault.Field != c.field {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		for _, w := range c.words {
			if !strings.Contains(err.Error(), w) {
				t.Errorf("%s: %q does not say %s", c.name, err, w)
			}
		}
	}
	// Just below the ceiling for the worst R1, which is the termination.
	all := f.series(f.nominal(nil))
	all[4].SourcePowerDBm = pointer(f.SourcePowerFor(200e-6) - 0.2)
	if _, err := f.judge.Judge(t.Context(), f.with(all...)); err != nil {
		t.Errorf("within the ceiling: %v", err)
	}
}

// TestHighAtLowDriveTwice: the second time it is a failed unit, and no later attempt overturns that.
func TestHighAtLowDriveTwice(t *testing.T) {
	f := newFloor(t, 2, 14, driveSection)
	for _, c := range []struct {
		name string
		high int // earlier attempts that found it so
		in   simulated.Insert
		want verdict.Verdict
	}{
		{"first time", 0, f.sleeping(8), verdict.Retest},
		{"again", 1, f.sleeping(8), verdict.Fail},
		{"seated better", 1, f.nominal(nil), verdict.Pass},
		{"good after having failed so", 2, f.nominal(nil), verdict.Fail},
	} {
		k := f.with(f.series(c.in)...)
		k.Background = inspection.Background{HighAtLowDrive: c.high}
		if j := f.inspect(k); j.Verdict != c.want {
			t.Errorf("%s: want %s, got %s", c.name, c.want, told(j))
		}
	}
}
