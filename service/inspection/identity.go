package inspection

import (
	"math"

	"example.com/admit/service/crystal"
	"example.com/admit/service/verdict"
)

// Two good units in parallel, some ppm apart, look like one with twice the capacitances and half the resistance. The ranges leave room for the
// spread of a lot: about a fifth for the capacitances, more for the resistance.
const (
	twiceLow, twiceHigh = 1.6, 2.4
	halfLow, halfHigh   = 0.3, 0.72
)

// sameFrequencyPPM is by how much a unit may have moved between two insertions beside its noise: it was handled, and is some tenths of a kelvin warmer.
const sameFrequencyPPM = 0.1

// repeatFactor is how many standard uncertainties of a repeat two readings of one unit may lie apart.
const repeatFactor = 3.0

// identity looks whether what lies in the contact head is one unit, and another one than before. Both are told by what was measured of others, and
// both make every reading one of something else than the unit that was named.
func (w *workup) identity() {
	if !w.nominal.sound() || w.nominal.est.ScaleUnknown {
		return
	}
	u := w.nominal.est.Unit()
	m := u.Modes[0]
	if lot := w.c.Background.Lot; lot != nil && lot.ResistanceOhm > 0 && lot.CapacitanceFarad > 0 && lot.ShuntCapacitanceFarad > 0 {
		r, c1, c0 := m.ResistanceOhm/lot.ResistanceOhm, m.CapacitanceFarad()/lot.CapacitanceFarad, u.ShuntCapacitanceFarad/lot.ShuntCapacitanceFarad
		if c1 > twiceLow && c1 < twiceHigh && c0 > twiceLow && c0 < twiceHigh && r > halfLow && r < halfHigh {
			w.g.add(verdict.TwoUnits, "C1 and C0 are %.2f and %.2f times the medians of %d units of the lot, R1 is %.2f times: two units lie in parallel.", c1, c0, lot.Units, r)
		}
	}
	if p := w.c.Background.Previous; p != nil && !sameUnit(p.Unit, w.c.Begin.Unit) && w.repeats(p) {
		w.g.add(verdict.SameUnitAgain, "fs, R1, C1 and C0 are those of %s, which was measured here before: it was not taken out.", p.Unit.Name())
	}
}

// sameUnit reports whether two names are of one unit.
func sameUnit(a, b UnitID) bool {
	if a.Serial != "" || b.Serial != "" {
		return a.Serial == b.Serial
	}
	return a.Lot == b.Lot && a.Carrier == b.Carrier && a.Pocket == b.Pocket
}

// repeats reports whether the reading is one of the previous unit again, within noise and contact.
func (w *workup) repeats(p *PreviousUnit) bool {
	est := w.nominal.est
	same := func(before verdict.Value, f func(crystal.Unit) (float64, bool), slack float64) bool {
		q, ok := quantityOfOne(est, f)
		if !ok || before.Value == 0 {
			return false
		}
		own, _ := q.covariance(&q)
		u := math.Sqrt(math.Max(0, own) + before.StandardUncertainty*before.StandardUncertainty)
		return math.Abs(q.value-before.Value) <= repeatFactor*u+slack
	}
	return same(p.ResonanceHz, func(u crystal.Unit) (float64, bool) { return u.Modes[0].ResonanceHz, true }, sameFrequencyPPM*1e-6*p.ResonanceHz.Value) &&
		same(p.ResistanceOhm, func(u crystal.Unit) (float64, bool) { return u.Modes[0].ResistanceOhm, true }, 0) &&
		same(p.CapacitanceFarad, func(u crystal.Unit) (float64, bool) { return u.Modes[0].CapacitanceFarad(), true }, 0) &&
		same(p.ShuntCapacitanceFarad, shuntCapacitance, 0)
}
