package plan_test

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/plan"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

const sections = `
drive:
  levels: [LEVELS]
  wait: 300 ms
  resistance_ratio: {reference: nominal-level, max: 1.4}
  frequency_shift_ppm: {max: 3}
overtones:
  - {order: ORDER, suppression_db: {min: -60}, definition: resistance-ratio}
`

// partOf returns a part type of the scenario with a drive section and, for plates, an overtone window.
func partOf(t *testing.T, k simulated.Kind) *parttype.PartType {
	t.Helper()
	source, err := simulated.LimitsFile(k.PartType)
	if err != nil {
		t.Fatal(err)
	}
	p, err := parttype.Parse(k.PartType, source)
	if err != nil {
		t.Fatal(err)
	}
	text := string(source) + sections
	levels, order := "1 uW, 10 uW, 30 uW, 1 uW", "3"
	switch {
	case k.DriveWatt < 1e-6:
		levels = "10 nW, 100 nW, 10 nW"
		text, _, _ = strings.Cut(text, "overtones:")
	case p.Overtone == 3:
		order = "1"
	}
	text = strings.NewReplacer("LEVELS", levels, "ORDER", order).Replace(text)
	if p, err = parttype.Parse(k.PartType, []byte(text)); err != nil {
		t.Fatal(err)
	}
	return p
}

// TestProgramme holds the order of every programme against the rules, and has the scenario's stations carry it out: each nominal unit passes.
func TestProgramme(t *testing.T) {
	for kind, k := range simulated.Scenario() {
		p := partOf(t, k)
		s := simulated.NewStation("N1", "North", k, rand.New(rand.NewPCG(uint64(kind), 3)))
		nominal, ok := plan.NominalStation(k.Network)
		if !ok {
			t.Fatalf("%s: no drive in a %s", k.PartType, k.Network)
		}
		var bands []sweep.Grid
		for _, w := range plan.For(p, nominal) {
			margin := 0.1 * (w.Grid.StopHz - w.Grid.StartHz)
			bands = append(bands, sweep.Grid{StartHz: w.Grid.StartHz - margin, StopHz: w.Grid.StopHz + margin, Points: 41})
		}
		cal := s.Calibrate("c", time.Unix(1e9, 0), bands...)
		station, ok := plan.CalibratedStation(&cal)
		programme := plan.For(p, station)
		if !ok || len(programme) != len(bands) {
			t.Fatalf("%s: %d sweeps in a calibrated station, %d in a nominal one", k.PartType, len(programme), len(bands))
		}
		check(t, p, station, programme)
		c := inspection.Case{
			Begin: inspection.Begin{
				Purpose: inspection.Production, ContactHead: inspection.ContactHead(cal.ContactHead), Calibration: inspection.CalibrationID(cal.ID), MeasuredAt: time.Unix(1e9+60, 0),
			},
			PartType: p, Calibration: &cal,
		}
		if err := inspection.CheckReach(p, &cal); err != nil {
			t.Errorf("%s: %v", k.PartType, err)
		}
		in := simulated.Insert{Unit: k.Nominal()}
		if p.Overtone == 1 && len(p.Overtones) > 0 {
			in.Unit = simulated.WithOvertone(in.Unit, 1, 3, 0.0028, 9*k.ResistanceOhm)
		}
		for _, w := range programme {
			number := w.DriveStep
			if w.Role == sweep.Overtone {
				number = w.Order
			}
			m := s.MeasureAt(in, w.Grid, w.Role, number, w.SourcePowerDBm)
			c.Sweeps = append(c.Sweeps, m)
		}
		j, err := inspection.NewJudge().Judge(t.Context(), &c)
		if err != nil {
			t.Fatal(err)
		}
		if j.Verdict != verdict.Pass {
			t.Errorf("%s: %s %+v", k.PartType, j.Verdict, j.RetestCauses)
			for _, f := range j.Findings {
				t.Log(f.Text)
			}
		}
	}
}

// check holds a programme against the rules that it must keep.
func check(t *testing.T, p *parttype.PartType, s plan.Station, programme []plan.Sweep) {
	t.Helper()
	lowest := math.Inf(1)
	for _, watt := range p.Drive.LevelsWatt {
		lowest = math.Min(lowest, watt)
	}
	step, mains, strong := 0, 0, false
	for i, w := range programme {
		worst, _ := s.Drive.WorstPowerWatt(w.SourcePowerDBm, 0, math.Inf(1))
		if worst > p.MaximumDriveWatt*1.0001 {
			t.Errorf("%s, sweep %d: %g W in the worst unit, the part type allows %g W", p.Name, i, worst, p.MaximumDriveWatt)
		}
		switch w.Role {
		case sweep.Drive:
			if w.DriveStep != step {
				t.Errorf("%s: step %d where %d is due", p.Name, w.DriveStep, step)
			}
			if strong != (w.Wait > 0) {
				t.Errorf("%s: step %d waits %v, the level before was above the drive level: %v", p.Name, step, w.Wait, strong)
			}
			strong = p.Drive.LevelsWatt[step] > p.DriveLevelWatt*1.001
			step++
		case sweep.Main:
			mains++
			if strong {
				t.Errorf("%s: the main sweep stands behind a level above the drive level", p.Name)
			}
		}
		if step == 0 && worst > lowest*1.15 {
			t.Errorf("%s: sweep %d drives the unit before the series", p.Name, i)
		}
		if w.Grid.Points < sweep.MinPoints || w.Grid.Points > sweep.MaxPoints || !(w.Grid.StopHz > w.Grid.StartHz) || w.Dwell <= 0 {
			t.Errorf("%s, sweep %d: %+v", p.Name, i, w)
		}
	}
	if mains != 1 || step != len(p.Drive.LevelsWatt) {
		t.Errorf("%s: %d main sweeps, %d of %d steps", p.Name, mains, step, len(p.Drive.LevelsWatt))
	}
}

// TestWindowsFollowTheLimits: tighter limits give narrower windows, and a main sweep with a load reaches the load resonance.
func TestWindowsFollowTheLimits(t *testing.T) {
	const text = `part_type: TM-25M000-F10
version: 1
vibration_mode: thickness-shear
overtone: 1
nominal_frequency: 25 MHz
circuit_condition: {load_capacitance: 10 pF, load_connection: series}
drive_level: 10 uW
maximum_drive_level: 200 uW
limits:
  frequency_deviation_ppm: {of: load_resonance, min: -LIMIT, max: LIMIT}
  motional_resistance: {max: 40 ohm}
  motional_capacitance: {min: 4 fF, max: 7 fF}
  shunt_capacitance: {max: 3 pF}
`
	station, _ := plan.NominalStation(network.PiNetwork)
	span := func(limit string) (main plan.Sweep, hz float64) {
		p, err := parttype.Parse("x", []byte(strings.ReplaceAll(text, "LIMIT", limit)))
		if err != nil {
			t.Fatal(err)
		}
		all := plan.For(p, station)
		if len(all) != 2 || all[0].Role != sweep.Main || all[1].Role != sweep.ShuntCapacitance {
			t.Fatalf("programme %+v", all)
		}
		return all[0], all[0].Grid.StopHz - all[0].Grid.StartHz
	}
	tight, a := span("5")
	_, b := span("50")
	if !(a < b) || tight.Grid.StopHz < 25e6 || tight.Grid.StartHz > 25e6*(1-300e-6) {
		t.Errorf("window %+v of %g Hz for 5 ppm, %g Hz for 50 ppm", tight.Grid, a, b)
	}
	if _, ok := plan.NominalStation(network.Unknown); ok {
		t.Error("a drive level in an unknown network")
	}
	// Where the calibration ends, nothing is asked for.
	station.Bands = []network.Band{{LowHz: 24.9e6, HighHz: 25.1e6}}
	p, _ := parttype.Parse("x", []byte(strings.ReplaceAll(text, "LIMIT", "5")))
	if all := plan.For(p, station); len(all) != 1 {
		t.Errorf("beyond the calibrated band: %+v", all)
	}
}
