package inspection_test

import (
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// measuredAt is when the units of the tests were measured; calibrations are three hours older.
var measuredAt = time.Date(2026, 11, 30, 9, 12, 44, 0, time.UTC)

// floor is a simulated station with what a test needs to inspect units at it.
type floor struct {
	*testing.T
	*simulated.Station
	judge *inspection.Judge
	base  inspection.Case
}

// newFloor returns the station of a part type of the scenario, by index, with the sections given in place of those of its limits file: the text from
// "limits:" on is kept unless a section begins with the key itself.
func newFloor(t *testing.T, kind int, seed uint64, sections string, bands ...sweep.Grid) *floor {
	t.Helper()
	k := simulated.Scenario()[kind]
	s := simulated.NewStation("N1", "North", k, rand.New(rand.NewPCG(seed, 77)))
	source, err := simulated.LimitsFile(k.PartType)
	if err != nil {
		t.Fatal(err)
	}
	text := string(source)
	for _, key := range []string{"limits:", "decision:", "temperature:", "overtone:"} {
		if strings.HasPrefix(sections, key) || strings.Contains(sections, "\n"+key) {
			text = without(text, key)
		}
	}
	part, err := parttype.Parse(k.PartType, []byte(text+sections))
	if err != nil {
		t.Fatal(err)
	}
	cal := s.Calibrate("N1-A-2026-11-30", measuredAt.Add(-3*time.Hour), bands...)
	locked := true
	return &floor{t, s, inspection.NewJudge(), inspection.Case{
		Begin: inspection.Begin{
			ID:      inspection.ID{6: 0x70, 8: 0x80},
			Purpose: inspection.Production, Unit: inspection.UnitID{Serial: "TM0000123", Lot: "L2601"}, Station: "N1", ContactHead: "N1-A",
			PartType: inspection.PartTypeRef{Name: part.Name, Version: part.Version}, Calibration: inspection.CalibrationID(cal.ID),
			MeasuredAt: measuredAt, ReferenceLock: &locked,
		},
		PartType: part, Calibration: &cal,
	}}
}

// without takes a top-level key with what belongs to it out of a YAML text.
func without(text, key string) string {
	var kept []string
	inside := false
	for line := range strings.Lines(text) {
		if inside && (strings.HasPrefix(line, " ") || strings.TrimSpace(line) == "") {
			continue
		}
		if inside = strings.HasPrefix(line, key); !inside {
			kept = append(kept, line)
		}
	}
	return strings.Join(kept, "")
}

// nominal returns the nominal unit with changes.
func (f *floor) nominal(change func(*crystal.Mode, *crystal.Unit)) simulated.Insert {
	u := f.Kind.Nominal()
	if change != nil {
		change(&u.Modes[0], &u)
	}
	return simulated.Insert{Unit: u}
}

// series sweeps the levels of the part type, each with the source power of a fixed programme, and the main sweep behind the first step at the drive level.
func (f *floor) series(in simulated.Insert) []sweep.Sweep {
	var all []sweep.Sweep
	p := f.base.PartType
	main := false
	for k, watt := range p.Drive.LevelsWatt {
		all = append(all, f.MeasureAt(in, f.Window(201), sweep.Drive, k, f.SourcePowerFor(watt)))
		if !main && watt == p.DriveLevelWatt {
			main = true
			all = append(all, f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerFor(watt)))
		}
	}
	return all
}

// with returns the case of some sweeps.
func (f *floor) with(sweeps ...sweep.Sweep) *inspection.Case {
	c := f.base
	c.Sweeps = sweeps
	return &c
}

// inspect judges a case.
func (f *floor) inspect(c *inspection.Case) *verdict.Judgement {
	f.Helper()
	j, err := f.judge.Judge(f.Context(), c)
	if err != nil {
		f.Fatal(err)
	}
	return &j
}

// finding returns the finding of a quantity at a place.
func finding(j *verdict.Judgement, q parttype.Quantity, step int) *verdict.Finding {
	for i := range j.Findings {
		if f := &j.Findings[i]; f.Quantity == q && f.Where.DriveStep == step {
			return f
		}
	}
	return nil
}

// causes returns the codes of the retest causes.
func causes(j *verdict.Judgement) string {
	var all []string
	for _, c := range j.RetestCauses {
		all = append(all, string(c.Cause))
	}
	return strings.Join(all, " ")
}

// told prints a judgement for a failed test.
func told(j *verdict.Judgement) string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s %s", j.Verdict, j.Disposition)
	for _, c := range j.RetestCauses {
		fmt.Fprintf(&b, "\n  cause %s: %s", c.Cause, c.Text)
	}
	for _, f := range j.Findings {
		fmt.Fprintf(&b, "\n  %s: %s", f.Outcome, f.Text)
	}
	for _, r := range j.Remarks {
		fmt.Fprintf(&b, "\n  remark: %s", r)
	}
	return b.String()
}
