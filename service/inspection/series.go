package inspection

import (
	"fmt"
	"math"

	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// series is the drive series of a case as it was measured.
type series struct {
	levels    []level // one for each step of the part type
	broken    string  // why the order of the sweeps is not to be trusted; empty: it is
	reference *fitted // the reading at the part type's drive level; nil: none
	high      bool    // the first low level was out of limit for the first time: what would follow was rightly left out
}

// level is one step of the series.
type level struct {
	step    int
	wanted  float64 // watt
	fit     *fitted // nil: not measured
	power   verdict.Value
	powered bool   // the power is known
	missed  string // why the level is not the one wanted; empty: it is
}

// usable reports whether a reading of the level can be taken.
func (l *level) usable() bool { return l.fit.sound() && l.missed == "" }

// endedEarly reports whether a station had a reason to end its sweeps before the main one: a first level out of limit, or a sweep that shows no unit.
func (s *series) endedEarly() bool {
	if s.high {
		return true
	}
	for k := range s.levels {
		if f := s.levels[k].fit; f != nil && !f.sound() {
			return true
		}
	}
	return false
}

// readSeries puts the drive sweeps in their places, looks at their order and their levels, and finds the readings at the drive level of the part
// type: the one that levels are compared with, and the one that the limits section is held against.
func (w *workup) readSeries() {
	if w.main >= 0 {
		w.nominal = w.fits[w.main]
	}
	d := w.p.Drive
	if d == nil {
		return
	}
	s := &w.series
	for k, watt := range d.LevelsWatt {
		s.levels = append(s.levels, level{step: k, wanted: watt})
	}
	w.checkOrder()
	for i, f := range w.fits {
		if f == nil || f.sweep.Role != sweep.Drive {
			continue
		}
		if l := &s.levels[f.sweep.DriveStep]; l.fit == nil {
			l.fit = w.fits[i]
			l.power, l.powered = f.powerWatt()
		}
	}
	s.reference = w.atDriveLevel()
	for k := range s.levels {
		if l := &s.levels[k]; l.fit.sound() {
			l.missed = w.missed(l)
		}
	}
	if step := w.atDriveLevel(); step != nil {
		s.reference = step
		if w.nominal == nil || !w.mainAtDriveLevel() {
			w.nominal = step
		}
		return
	}
	s.reference = nil
	switch {
	case w.nominal == nil:
	case !w.mainAtDriveLevel():
		w.nominal = nil
	case w.nominal.sound():
		s.reference = w.nominal
	}
}

// atDriveLevel returns the first usable reading of a step at the drive level; nil when there is none.
func (w *workup) atDriveLevel() *fitted {
	for k := range w.series.levels {
		if l := &w.series.levels[k]; near(l.wanted, w.p.DriveLevelWatt, 1e-6) && l.usable() {
			return l.fit
		}
	}
	return nil
}

// mainAtDriveLevel reports whether the main sweep was taken at the drive level. One of unknown power is believed to be.
func (w *workup) mainAtDriveLevel() bool {
	f := w.fits[w.main]
	if !f.driven {
		return true
	}
	return w.hits(f, w.p.DriveLevelWatt, f.est.Unit().Modes[0].ResistanceOhm) || w.hits(f, w.p.DriveLevelWatt, expected(w.p).ResistanceOhm)
}

// hits reports whether the source put a wanted power into the unit, or would have if its R1 were the one given; 0 ohm is unknown and no hit.
func (w *workup) hits(f *fitted, wanted, resistanceOhm float64) bool {
	return resistanceOhm > 0 && near(f.powerInWatt(resistanceOhm), wanted, w.p.Drive.TolerancePercent/100)
}

// missed says why a level is not the one wanted; empty when it is. The source cannot know a resistance before it has been measured, and a
// resistance that changes with the level is what the series looks for. So a source that is right for the unit as it reads at the drive level has not
// missed; and a reading out of its limit counts when the source is right for the unit that the part type expects: it must not be lost
// for being as far out as it is.
func (w *workup) missed(l *level) string {
	f := l.fit
	if !f.driven {
		if !w.g.scale {
			return ""
		}
		return fmt.Sprintf("step %d states no source power, and its level cannot be told", l.step)
	}
	own := f.est.Unit().Modes[0].ResistanceOhm
	if w.hits(f, l.wanted, own) {
		return ""
	}
	reference := 0.0
	if r := w.series.reference; r != nil {
		reference = r.est.Unit().Modes[0].ResistanceOhm
	} else if w.main >= 0 && w.fits[w.main].sound() && w.mainAtDriveLevel() {
		reference = w.fits[w.main].est.Unit().Modes[0].ResistanceOhm
	}
	usual := 0.0
	if limit := w.p.Drive.MotionalResistance.Max; reference == 0 || limit != nil && own > *limit {
		usual = expected(w.p).ResistanceOhm
	}
	if w.hits(f, l.wanted, reference) || w.hits(f, l.wanted, usual) {
		return ""
	}
	return fmt.Sprintf("step %d put %s into the unit where %s within %g %% are wanted", l.step,
		verdict.Format(l.power, verdict.UnitWatt), verdict.FormatBound(l.wanted, verdict.UnitWatt), w.p.Drive.TolerancePercent)
}

// checkOrder holds the sweeps against the order of the series: nothing before it drives the unit harder than its lowest level, since a strong drive
// cures the very fault that the series looks for, and its steps follow each other.
func (w *workup) checkOrder() {
	d := w.p.Drive
	first, last := -1, -1
	for i := range w.c.Sweeps {
		s := &w.c.Sweeps[i]
		if s.Role != sweep.Drive {
			continue
		}
		switch {
		case first < 0 && s.DriveStep != 0:
			w.series.broken = fmt.Sprintf("the drive series begins with step %d", s.DriveStep)
			return
		case s.DriveStep == last:
			w.series.broken = fmt.Sprintf("step %d of the drive series was swept twice", last)
			return
		case s.DriveStep < last:
			w.series.broken = fmt.Sprintf("step %d of the drive series was swept after step %d", s.DriveStep, last)
			return
		}
		if first < 0 {
			first = i
		}
		last = s.DriveStep
	}
	lowest := math.Inf(1)
	for _, watt := range d.LevelsWatt {
		lowest = math.Min(lowest, watt)
	}
	for i := range max(first, 0) {
		s := &w.c.Sweeps[i]
		if s.Role == sweep.ShuntCapacitance || !w.g.scale {
			continue // no mode is driven there, or nobody can tell how hard
		}
		watt, known := w.loudestWatt(i)
		switch {
		case !known:
			w.series.broken = fmt.Sprintf("the %s sweep before the drive series states no source power", s.Role)
			return
		case watt > lowest*(1+d.TolerancePercent/100):
			w.series.broken = fmt.Sprintf("the %s sweep before the drive series put %s into the unit, whose lowest level is to be %s", s.Role,
				verdict.FormatBound(significant(watt), verdict.UnitWatt), verdict.FormatBound(lowest, verdict.UnitWatt))
			return
		}
	}
}

// loudestWatt returns the highest power that a sweep put into the unit: that of the fitted unit, or of the worst one where none was found.
func (w *workup) loudestWatt(i int) (watt float64, known bool) {
	if f := w.fits[i]; f.sound() {
		v, ok := f.powerWatt()
		return v.Value, ok
	}
	s := &w.c.Sweeps[i]
	drive, err := w.g.calibration.Drive()
	if err != nil || s.SourcePowerDBm == nil {
		return 0, false
	}
	low, high := plausibleOhm(w.p)
	watt, _ = drive.WorstPowerWatt(*s.SourcePowerDBm, low, high)
	return watt, true
}

// ratioBound returns the largest resistance ratio for a unit, by its R1 at the drive level; above the last row of a table that row holds.
func ratioBound(rows []parttype.RatioLimit, resistanceOhm float64) float64 {
	for _, row := range rows {
		if row.UpToOhm == 0 || resistanceOhm <= row.UpToOhm {
			return row.Max
		}
	}
	return rows[len(rows)-1].Max
}

// significant keeps three figures, for a text.
func significant(v float64) float64 {
	if v == 0 || math.IsInf(v, 0) || math.IsNaN(v) {
		return v
	}
	scale := math.Pow(10, 2-math.Floor(math.Log10(math.Abs(v))))
	return math.Round(v*scale) / scale
}
