package inspection

import (
	"math"

	"example.com/admit/service/crystal"
	"example.com/admit/service/resonance"
	"example.com/admit/service/verdict"
)

// contact looks whether R1 moves between sweeps at one level by more than the contact does from one insertion to the next.
// Levels that differ are left to the drive series, and a unit that it shows to depend on its drive is not looked at: its R1 moves for that reason.
func (w *workup) contact() {
	if w.dependsOnDrive() {
		return
	}
	if w.p.Drive == nil || !w.g.scale || w.series.broken != "" {
		return
	}
	var at []*fitted // sweeps at one level, in measuring order
	var level float64
	look := func(f *fitted, watt float64) {
		if !f.sound() {
			return
		}
		if len(at) > 0 && !near(watt, level, 1e-6) {
			at = at[:0]
		}
		level = watt
		at = append(at, f)
		for _, other := range at[:len(at)-1] {
			w.compareContact(other, f)
		}
	}
	for i, f := range w.fits {
		switch {
		case f == nil:
		case i == w.main:
			if watt, ok := w.mainLevel(); ok {
				look(f, watt)
			}
		case w.series.isLevel(f):
			look(f, w.p.Drive.LevelsWatt[f.sweep.DriveStep])
		}
	}
}

// mainLevel returns the level of the series at which the main sweep was taken.
func (w *workup) mainLevel() (watt float64, ok bool) {
	power, ok := w.fits[w.main].powerWatt()
	if !ok {
		return 0, false
	}
	for _, watt := range w.p.Drive.LevelsWatt {
		if near(power.Value, watt, w.p.Drive.TolerancePercent/100) {
			return watt, true
		}
	}
	return 0, false
}

// isLevel reports whether a sweep is a usable level of the series.
func (s *series) isLevel(f *fitted) bool {
	for k := range s.levels {
		if s.levels[k].fit == f {
			return s.levels[k].usable()
		}
	}
	return false
}

// compareContact notes an unstable contact when two sweeps at one level disagree.
func (w *workup) compareContact(a, b *fitted) {
	q, ok := resistanceChange(a, b)
	if !ok || namedCause(w.g.causes, verdict.UnstableContact) {
		return
	}
	v, _, ok := q.measured()
	if allowed := w.contactAllows(v); ok && math.Abs(v.Value) > allowed {
		w.g.add(verdict.UnstableContact, "R1 moved by %.3g Ω between two sweeps at the same level (sweeps %d and %d); the contact explains %.2g Ω.", v.Value, a.index, b.index, allowed)
	}
}

// resistanceChange returns R1 of one sweep less that of another.
func resistanceChange(from, to *fitted) (quantity, bool) {
	return quantityFrom([]*resonance.Estimate{from.est, to.est}, func(u []crystal.Unit) (float64, bool) {
		return u[1].Modes[0].ResistanceOhm - u[0].Modes[0].ResistanceOhm, true
	})
}

// contactAllows returns the change of R1 that noise and the contact explain.
func (w *workup) contactAllows(change verdict.Value) float64 {
	return repeatFactor * math.Hypot(change.StandardUncertainty, math.Sqrt2*contactOf(w.c))
}

// dependentRatio is the ratio of R1 between two levels from which a unit counts as depending on its drive, where it is more than noise.
const dependentRatio = 1.05

// dependsOnDrive reports whether R1 differs between any two levels of the series.
func (w *workup) dependsOnDrive() bool {
	var sound []*fitted
	for k := range w.series.levels {
		if f := w.series.levels[k].fit; f.sound() && w.g.scale {
			sound = append(sound, f)
		}
	}
	for i, a := range sound {
		for _, b := range sound[:i] {
			if near(w.series.levels[a.sweep.DriveStep].wanted, w.series.levels[b.sweep.DriveStep].wanted, 1e-6) {
				continue
			}
			change, ok := resistanceChange(b, a)
			if !ok {
				continue
			}
			v, _, ok := change.measured()
			if ok && math.Abs(v.Value) > (dependentRatio-1)*b.est.Unit().Modes[0].ResistanceOhm && math.Abs(v.Value) > repeatFactor*v.StandardUncertainty {
				return true
			}
		}
	}
	return false
}
