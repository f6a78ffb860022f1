package main

import (
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"example.com/admit/fixtures/folder"
	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// measuredAt is when the units of the tests were measured; calibrations are three hours older.
var measuredAt = time.Date(2026, 11, 30, 9, 12, 44, 0, time.UTC)

// bench is a simulated station with its calibration and part type.
type bench struct {
	station *simulated.Station
	unit    inspection.Case // template without sweeps
}

// newBench returns a station of the scenario for a part type by index.
func newBench(t *testing.T, kind int, seed uint64) *bench {
	t.Helper()
	k := simulated.Scenario()[kind]
	s := simulated.NewStation("N1", "North", k, rand.New(rand.NewPCG(seed, 1)))
	source, err := simulated.LimitsFile(k.PartType)
	if err != nil {
		t.Fatal(err)
	}
	part, err := parttype.Parse(k.PartType, source)
	if err != nil {
		t.Fatal(err)
	}
	cal := s.Calibrate("N1-A-2026-11-30", measuredAt.Add(-3*time.Hour))
	locked := true
	return &bench{s, inspection.Case{
		Begin: inspection.Begin{
			Purpose: inspection.Production, Unit: inspection.UnitID{Serial: "TM0000123", Lot: "L2601"}, Station: "N1", ContactHead: "N1-A",
			PartType: inspection.PartTypeRef{Name: part.Name, Version: part.Version}, Calibration: inspection.CalibrationID(cal.ID),
			MeasuredAt: measuredAt, ReferenceLock: &locked,
		},
		PartType: part, Calibration: &cal,
	}}
}

// measure returns a case with one main sweep of an insert.
func (b *bench) measure(in simulated.Insert) *inspection.Case {
	c := b.unit
	cal := *b.unit.Calibration
	c.Calibration = &cal
	c.Sweeps = []sweep.Sweep{b.station.Measure(in, b.station.Window(401))}
	return &c
}

// nominal returns the nominal unit with changes.
func (b *bench) nominal(change func(m *crystal.Mode, u *crystal.Unit)) simulated.Insert {
	u := b.station.Kind.Nominal()
	change(&u.Modes[0], &u)
	return simulated.Insert{Unit: u}
}

// limited puts sections behind the limits file of a case.
func limited(t *testing.T, c *inspection.Case, sections string) *inspection.Case {
	t.Helper()
	part, err := parttype.Parse("part-type.yaml", append(append([]byte(nil), c.PartType.Source...), sections...))
	if err != nil {
		t.Fatal(err)
	}
	c.PartType = part
	return c
}

// series measures a drive series of a tenth, the whole and a tenth of the drive level, the main sweep behind the second, and holds it against limits.
func (b *bench) series(t *testing.T, in simulated.Insert) *inspection.Case {
	t.Helper()
	watt := b.unit.PartType.DriveLevelWatt
	c := limited(t, b.measure(in), fmt.Sprintf(`drive:
  levels: [%[1]g W, %[2]g W, %[1]g W]
  resistance_ratio: {reference: nominal-level, max: 1.5}
  frequency_shift_ppm: {max: 5}
`, watt/10, watt))
	c.Sweeps = nil
	for step, level := range []float64{watt / 10, watt, watt / 10} {
		c.Sweeps = append(c.Sweeps, b.station.MeasureAt(in, b.station.Window(201), sweep.Drive, step, b.station.SourcePowerFor(level)))
		if step == 1 {
			c.Sweeps = append(c.Sweeps, b.station.MeasureAt(in, b.station.Window(401), sweep.Main, 0, b.station.SourcePowerFor(level)))
		}
	}
	return c
}

// provedElsewhere are causes that need what was measured of other units: package inspection proves them on the same scenario.
var provedElsewhere = []verdict.Cause{verdict.TwoUnits, verdict.SameUnitAgain}

// TestEveryOutcome provokes pass, fail and every retest cause with simulated units of the whole scenario at 60 dB, through the files and the
// command line: folder written, `admit judge` run, exit status and cause read.
func TestEveryOutcome(t *testing.T) {
	same := func(*crystal.Mode, *crystal.Unit) {}
	provoked := map[verdict.Cause]bool{}
	for _, c := range provedElsewhere {
		provoked[c] = true
	}
	for kind, k := range simulated.Scenario() {
		for _, c := range []struct {
			name  string
			make  func(b *bench) *inspection.Case
			exit  int
			cause verdict.Cause
		}{
			{"as it should be", func(b *bench) *inspection.Case { return b.measure(b.nominal(same)) }, exitPass, ""},
			{"high resistance", func(b *bench) *inspection.Case {
				return b.measure(b.nominal(func(m *crystal.Mode, _ *crystal.Unit) { m.ResistanceOhm *= 3.5 }))
			}, exitFail, ""},
			{"off frequency", func(b *bench) *inspection.Case {
				return b.measure(b.nominal(func(m *crystal.Mode, _ *crystal.Unit) { m.ResonanceHz *= 1 + 50e-6 }))
			}, exitFail, ""},
			{"empty", func(b *bench) *inspection.Case { return b.measure(simulated.Insert{Kind: simulated.Empty}) }, exitRetest, verdict.NoUnit},
			{"bridged", func(b *bench) *inspection.Case { return b.measure(simulated.Insert{Kind: simulated.Bridged}) }, exitRetest, verdict.Shorted},
			{"a capacitance", func(b *bench) *inspection.Case {
				return b.measure(simulated.Insert{Unit: crystal.Unit{ShuntCapacitanceFarad: b.station.Kind.ShuntFarad}})
			}, exitRetest, verdict.NoResonance},
			{"resonance outside the sweep", func(b *bench) *inspection.Case {
				c := b.measure(b.nominal(same))
				w := b.station.Kind.LoadedBandwidthHz()
				fs := b.station.Kind.ResonanceHz()
				// The station sweeps far too low: the window ends one bandwidth and a half short of the resonance.
				c.Sweeps[0] = b.station.Measure(b.nominal(same), sweep.Grid{StartHz: fs - 7*w, StopHz: fs - 1.5*w, Points: 401})
				return c
			}, exitRetest, verdict.ResonanceOutsideSweep},
			{"noise above the signal", func(b *bench) *inspection.Case {
				quiet := b.station.NoiseRMS
				b.station.NoiseRMS *= 1e3
				defer func() { b.station.NoiseRMS = quiet }()
				c := b.measure(b.nominal(same))
				c.Calibration.ReceiverNoise.RMS *= 1e3
				return c
			}, exitRetest, verdict.TooNoisy},
			{"at the limit", func(b *bench) *inspection.Case {
				c := b.measure(b.nominal(same))
				p := *c.PartType
				text := strings.Replace(string(p.Source), "guarded-acceptance", "guarded-both", 1)
				text = replaceLimit(text, b.station.Kind.ResistanceOhm)
				part, err := parttype.Parse("part-type.yaml", []byte(text))
				if err != nil {
					t.Fatal(err)
				}
				c.PartType = part
				return c
			}, exitRetest, verdict.UndecidedAtLimit},
			{"no calibration", func(b *bench) *inspection.Case {
				c := b.measure(b.nominal(same))
				c.Calibration.Standards = nil
				return c
			}, exitRetest, verdict.CalibrationMissing},
			{"old calibration", func(b *bench) *inspection.Case {
				c := b.measure(b.nominal(same))
				c.Begin.MeasuredAt = measuredAt.Add(48 * time.Hour)
				return c
			}, exitRetest, verdict.CalibrationExpired},
			{"another contact head", func(b *bench) *inspection.Case {
				c := b.measure(b.nominal(same))
				c.Begin.ContactHead = "N1-B"
				return c
			}, exitRetest, verdict.CalibrationMismatch},
			{"reference unlocked", func(b *bench) *inspection.Case {
				c := b.measure(b.nominal(same))
				unlocked := false
				c.Begin.ReferenceLock = &unlocked
				return c
			}, exitRetest, verdict.ReferenceUnlocked},
			{"two resonances", func(b *bench) *inspection.Case {
				return b.measure(b.nominal(func(m *crystal.Mode, u *crystal.Unit) {
					second := *m
					second.ResonanceHz += 2 * b.station.Kind.LoadedBandwidthHz()
					second.ResistanceOhm *= 2
					u.Modes = append(u.Modes, second)
				}))
			}, exitRetest, verdict.ModelMisfit},
			{"swept too fast with a source that restarts", func(b *bench) *inspection.Case {
				c := b.measure(b.nominal(same))
				quick := sweep.Timing{Dwell: c.Sweeps[0].Timing.Dwell / 50, Averaging: c.Sweeps[0].Timing.Dwell / 200, Phase: sweep.PhaseRestarted}
				c.Sweeps[0] = b.station.MeasureStepped(b.nominal(same), b.station.Window(401), quick)
				return c
			}, exitRetest, verdict.SweptTooFast},
			{"contact that changes within the sweep", func(b *bench) *inspection.Case {
				c := b.measure(b.nominal(same))
				worse := b.nominal(same)
				worse.ContactOhm = 0.4 * b.station.Kind.ResistanceOhm
				later := b.station.MeasureAt(worse, b.station.Window(401), sweep.Main, 0, b.station.SourcePowerDBm)
				g := b.station.Window(401)
				cut := int(400 * (b.station.Kind.ResonanceHz() - g.StartHz) / (g.StopHz - g.StartHz)) // as it crosses the resonance
				copy(c.Sweeps[0].Re[cut:], later.Re[cut:])
				copy(c.Sweeps[0].Im[cut:], later.Im[cut:])
				return c
			}, exitRetest, verdict.UnstableContact},
			{"temperature", func(b *bench) *inspection.Case {
				c := limited(t, b.measure(b.nominal(same)), "temperature: {reference_c: 25, allowed_c: {min: 23, max: 27}}\n")
				c.Begin.Temperature = &inspection.Temperature{Celsius: 29, StandardUncertainty: 0.2}
				return c
			}, exitRetest, verdict.TemperatureOutOfRange},
			{"a drive series as it should be", func(b *bench) *inspection.Case { return b.series(t, b.nominal(same)) }, exitPass, ""},
			{"high at the first low level", func(b *bench) *inspection.Case {
				in := b.nominal(same)
				in.Drive = &simulated.DriveLaw{SleepRatio: 2.5, WakeWatt: 0.3 * b.unit.PartType.DriveLevelWatt}
				return b.series(t, in)
			}, exitRetest, verdict.HighResistanceAtLowDrive},
			{"the strong level first", func(b *bench) *inspection.Case {
				c := b.series(t, b.nominal(same))
				c.Sweeps[0], c.Sweeps[1] = c.Sweeps[1], c.Sweeps[0]
				return c
			}, exitRetest, verdict.DriveOrderBroken},
			{"source level off", func(b *bench) *inspection.Case {
				c := b.series(t, b.nominal(same))
				c.Calibration.SourceLevelOffsetDB = -2
				return c
			}, exitRetest, verdict.DriveLevelMissed},
			{"no window about an overtone", func(b *bench) *inspection.Case {
				window := "order: 7"
				if b.unit.PartType.VibrationMode != parttype.ThicknessShear {
					window = "frequency_ratio: 6.27"
				}
				return limited(t, b.measure(b.nominal(same)), "overtones: [{"+window+", suppression_db: {min: 10}, definition: resistance-ratio}]\n")
			}, exitRetest, verdict.SurveyTooCoarse},
		} {
			provoked[c.cause] = true
			t.Run(k.PartType+"/"+c.name, func(t *testing.T) {
				b := newBench(t, kind, uint64(kind)+7)
				dir := filepath.Join(t.TempDir(), "unit")
				if err := folder.Write(dir, c.make(b)); err != nil {
					t.Fatal(err)
				}
				code, j := judgeJSON(t, dir)
				causes := []string{}
				for _, k := range j.RetestCauses {
					causes = append(causes, k.Cause)
				}
				if code != c.exit || (c.cause != "" && !contains(causes, string(c.cause))) {
					var text strings.Builder
					for _, f := range j.Findings {
						fmt.Fprintf(&text, "\n  %s: %s", f.Outcome, f.Text)
					}
					t.Errorf("exit %d with %v, want %d with %q%s%v", code, causes, c.exit, c.cause, text.String(), j.RetestCauses)
				}
			})
		}
	}
	for _, c := range verdict.Causes() {
		if !provoked[c] {
			t.Errorf("nothing provokes %s", c)
		}
	}
}

// replaceLimit sets the largest motional resistance of a limits file.
func replaceLimit(text string, ohm float64) string {
	lines := strings.Split(text, "\n")
	for i, l := range lines {
		if strings.HasPrefix(strings.TrimSpace(l), "motional_resistance:") {
			lines[i] = fmt.Sprintf("  motional_resistance: {max: %g ohm}", ohm)
		}
	}
	return strings.Join(lines, "\n")
}

func contains(all []string, v string) bool {
	for _, a := range all {
		if a == v {
			return true
		}
	}
	return false
}

// TestBadFolders: each is exit status 3 with a message that names file, line or field and what was expected.
func TestBadFolders(t *testing.T) {
	for _, c := range []struct {
		name   string
		damage func(dir string) error
		want   []string
	}{
		{"truncated sweep", func(dir string) error {
			return edit(dir, "main", func(s string) string { return s[:len(s)-len(s)/3-4] })
		}, []string{"main"}},
		{"not a number", func(dir string) error {
			return edit(dir, "main", func(s string) string { return strings.Replace(s, "0.0", "NaN", 1) })
		}, []string{"main", "NaN"}},
		{"unknown key", func(dir string) error {
			return edit(dir, "inspection.yaml", func(s string) string { return s + "weather: fine\n" })
		}, []string{"inspection.yaml", "weather"}},
		{"unknown unit", func(dir string) error {
			return edit(dir, "part-type.yaml", func(s string) string { return strings.Replace(s, "40 ohm", "40 parsec", 1) })
		}, []string{"part-type.yaml", "parsec", "ohm"}},
		{"two faults at once", func(dir string) error {
			return edit(dir, "part-type.yaml", func(s string) string {
				return strings.Replace(strings.Replace(s, "version: 1", "version: 0", 1), "overtone: 1", "overtone: -1", 1)
			})
		}, []string{"version", "overtone"}},
		{"no part type", func(dir string) error { return os.Remove(filepath.Join(dir, "part-type.yaml")) }, []string{"part-type.yaml"}},
		{"no main sweep", func(dir string) error {
			return edit(dir, "inspection.yaml", func(s string) string { return strings.Replace(s, "role: main", "role: unwanted", 1) })
		}, []string{"sweeps", "role main"}},
		{"unwanted modes", func(dir string) error {
			return edit(dir, "part-type.yaml", func(s string) string {
				return s + "unwanted_modes:\n  - {from: -100 kHz, to: 500 kHz, minimum_width: 50 Hz, suppression_db: {min: 3}, definition: resistance-ratio}\n"
			})
		}, []string{"unwanted_modes"}},
		{"no such folder", os.RemoveAll, []string{"unit"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			b := newBench(t, 2, 5)
			dir := filepath.Join(t.TempDir(), "unit")
			if err := folder.Write(dir, b.measure(simulated.Insert{Unit: b.station.Kind.Nominal()})); err != nil {
				t.Fatal(err)
			}
			if err := c.damage(dir); err != nil {
				t.Fatal(err)
			}
			var out, errs strings.Builder
			if code := run(t.Context(), []string{"judge", dir}, streams{strings.NewReader(""), &out, &errs}); code != exitBad {
				t.Errorf("exit %d, want 3\n%s", code, out.String())
			}
			for _, w := range c.want {
				if !strings.Contains(errs.String(), w) {
					t.Errorf("%q is missing in: %s", w, errs.String())
				}
			}
		})
	}
}

// edit changes the file of a folder whose name begins with a prefix.
func edit(dir, prefix string, change func(string) string) error {
	names, err := filepath.Glob(filepath.Join(dir, prefix+"*"))
	if err != nil || len(names) == 0 {
		return fmt.Errorf("no file %s* in %s (%v)", prefix, dir, err)
	}
	text, err := os.ReadFile(names[0])
	if err != nil {
		return err
	}
	changed := change(string(text))
	if changed == string(text) {
		return fmt.Errorf("%s was left as it is", names[0])
	}
	return os.WriteFile(names[0], []byte(changed), 0o600)
}

// TestWrongCommandLines: exit status 3 and one line.
func TestWrongCommandLines(t *testing.T) {
	for _, args := range [][]string{{"nonsense"}, {"judge"}, {"judge", "--nonsense", "x"}, {"replay"}, {"show"}, {"show", "--most", "x"}, {"demo", "--pace", "1ns"}, {"check-config", "--config", "/nonexistent/admit.yaml"}} {
		var out, errs strings.Builder
		if code := run(t.Context(), args, streams{strings.NewReader(""), &out, &errs}); code != exitBad || !strings.HasPrefix(errs.String(), "admit: ") {
			t.Errorf("%v: exit %d, %q", args, code, errs.String())
		}
	}
}
