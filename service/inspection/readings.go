package inspection

import (
	"fmt"
	"math"
	"strings"
	"unicode"
	"unicode/utf8"

	"example.com/admit/service/crystal"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/resonance"
	"example.com/admit/service/verdict"
)

// contactInfluence is the name of the repeat contact in the budget: a resistance in series with the unit, new at every insertion.
const contactInfluence = "contact"

// addContact adds the repeat contact to an estimate: it moves R1 and nothing else that can be told from it.
func addContact(est *resonance.Estimate, contactOhm float64) {
	if est.ScaleUnknown || contactOhm <= 0 || est.State != resonance.Found {
		return
	}
	k := resonance.Contribution{Name: contactInfluence}
	shift := contactOhm / math.Exp(est.Value[resonance.LogResistance])
	k.Shift[resonance.LogResistance] = shift
	k.Covariance[resonance.LogResistance][resonance.LogResistance] = shift * shift
	est.Systematic = append(est.Systematic, k)
}

// causeOf turns what the fit found into the retest cause of the same name; a Found estimate has none.
func causeOf(est *resonance.Estimate) (verdict.RetestCause, bool) {
	if est.State == resonance.Found {
		return verdict.RetestCause{}, false
	}
	return verdict.NewCause(verdict.Cause(est.State), sentence(est.Detail)), true
}

// sentence gives a detail a capital at its front and a full stop at its end.
func sentence(detail string) string {
	if detail == "" {
		return ""
	}
	first, size := utf8.DecodeRuneInString(detail)
	return string(unicode.ToUpper(first)) + strings.TrimRight(detail[size:], ".") + "."
}

// mainLimits puts a reading beside every limit of the limits section. They hold at the drive level of the part type.
func (w *workup) mainLimits() {
	for _, limit := range w.p.Limits {
		w.limit(limit, w.mainReading(limit))
	}
}

// mainReading returns the reading for a limit of the main mode, with what suspends it.
func (w *workup) mainReading(limit parttype.Limit) verdict.Reading {
	r := verdict.Reading{Quantity: limit.Quantity, Where: verdict.Nowhere, Unit: unitOf(limit.Quantity)}
	absolute := limit.Quantity == parttype.FrequencyDeviation
	if limit.Quantity == parttype.ShuntCapacitance && w.shunt != nil {
		r.SuspendedBy = w.suspendedBy(false)
		r.Note = shuntNote
		value(&r, *w.shuntQuantity, true)
		return r
	}
	if w.nominal == nil {
		r.SuspendedBy, r.Note = w.suspendedBy(absolute), "the unit was not measured at its drive level"
		switch {
		case w.series.high:
			r.SuspendedBy = append(r.SuspendedBy, verdict.HighResistanceAtLowDrive)
		case w.series.endedEarly():
			for k := range w.series.levels {
				if f := w.series.levels[k].fit; f != nil && !f.sound() {
					r.SuspendedBy = append(r.SuspendedBy, w.suspendedBy(absolute, f)...)
				}
			}
		default:
			w.cause(verdict.NewCause(verdict.DriveLevelMissed, fmt.Sprintf("No sweep was taken at the drive level of %s.", verdict.FormatBound(w.p.DriveLevelWatt, verdict.UnitWatt))))
			r.SuspendedBy = append(r.SuspendedBy, verdict.DriveLevelMissed)
		}
		return r
	}
	est := w.nominal.est
	r.SuspendedBy = w.suspendedBy(absolute, w.nominal)
	if !w.g.scale && needsOhms(limit) {
		c := verdict.NewCause(verdict.CalibrationMissing, "The fixture network is not known: resistances, inductance and capacitances cannot be told.")
		w.cause(c)
		r.SuspendedBy = append(r.SuspendedBy, c.Cause)
		return r
	}
	if !known(est) {
		return r
	}
	q, note, ok := w.read(limit, est)
	if ok {
		value(&r, q, true)
		if !w.g.scale && limit.Quantity == parttype.QualityFactor && !reachesLoaded(limit.Bounds, r.Measured.Value) {
			c := verdict.NewCause(verdict.CalibrationMissing, "The fixture network is not known: the quality factor is that of the unit loaded by it, and the unit's own lies above.")
			w.cause(c)
			r.SuspendedBy = append(r.SuspendedBy, c.Cause)
		}
	} else if r.Note = note; len(r.SuspendedBy) == 0 {
		// A unit that has no such quantity at all: not a part out of limit, a limit that does not fit the unit.
		r.SuspendedBy = []verdict.Cause{verdict.ModelMisfit}
		w.cause(verdict.NewCause(verdict.ModelMisfit, fmt.Sprintf("%s cannot be told: %s.", verdict.Label(limit.Quantity, verdict.Nowhere), r.Note)))
	}
	return r
}

// known reports whether an estimate holds a unit, trusted or not.
func known(est *resonance.Estimate) bool {
	return est.Value[resonance.ResonanceHz] > 0 && (est.State == resonance.Found || est.State == resonance.OutsideSweep || est.State == resonance.Misfit)
}

// needsOhms reports whether a limit needs the scale of impedances; frequencies of the motional arm and Q do not.
func needsOhms(l parttype.Limit) bool {
	switch l.Quantity {
	case parttype.QualityFactor:
		return false
	case parttype.FrequencyDeviation:
		return l.Of != parttype.MotionalResonance
	}
	return true
}

// reachesLoaded reports whether the quality factor of the unit loaded by an unknown network settles a limit: the unit's own is higher, so that
// a lower limit that is met with the load is met, and nothing else can be said.
func reachesLoaded(b parttype.Bounds, loaded float64) bool {
	return b.Max == nil && b.Min != nil && loaded >= *b.Min
}

// unitOf returns the unit of a quantity's limit.
func unitOf(q parttype.Quantity) string {
	switch q {
	case parttype.FrequencyDeviation, parttype.PullingRange, parttype.DriveFrequencyShift, parttype.DriveReturnShift:
		return verdict.UnitPPM
	case parttype.MotionalResistance, parttype.ResonanceResistance, parttype.LoadResonanceResistance, parttype.DriveMotionalResistance:
		return verdict.UnitOhm
	case parttype.OvertoneSuppression, parttype.UnwantedModeSuppression:
		return verdict.UnitDecibel
	case parttype.MotionalCapacitance, parttype.ShuntCapacitance:
		return verdict.UnitFarad
	case parttype.PullingSensitivity:
		return verdict.UnitPPMPerPF
	}
	return verdict.UnitNone
}

// read returns the reading for one limit, or a note why the unit has none. Frequencies are referred to the temperature at which the limits hold.
func (w *workup) read(l parttype.Limit, est *resonance.Estimate) (q quantity, note string, ok bool) {
	f := quantityOf(l, w.p)
	if f == nil {
		return q, "this quantity is not one of the main sweep", false
	}
	if q, ok = quantityOfOne(est, f); ok {
		if l.Quantity == parttype.FrequencyDeviation {
			w.refer(&q)
		}
		return q, "", true
	}
	unit := est.Unit()
	return q, fmt.Sprintf("the unit has no such frequency (figure of merit M = %.2f; zero phase needs more than 2)", unit.FigureOfMerit()), false
}

// quantityOf returns a limit's quantity as an exact function of the unit, in the unit of its limit; false where the unit has none.
func quantityOf(l parttype.Limit, p *parttype.PartType) func(crystal.Unit) (float64, bool) {
	load, how := p.Condition.LoadCapacitanceFarad, p.Condition.Connection
	switch l.Quantity {
	case parttype.FrequencyDeviation:
		deviation := func(hz float64) float64 { return (hz - p.NominalFrequencyHz) / p.NominalFrequencyHz * 1e6 }
		switch l.Of {
		case parttype.LoadResonance:
			return func(u crystal.Unit) (float64, bool) {
				hz, _, err := u.LoadResonance(load, how)
				return deviation(hz), err == nil
			}
		case parttype.Resonance:
			return func(u crystal.Unit) (float64, bool) {
				hz, _, err := u.Resonance()
				return deviation(hz), err == nil
			}
		}
		return func(u crystal.Unit) (float64, bool) { return deviation(u.Modes[0].ResonanceHz), true }
	case parttype.MotionalResistance:
		return func(u crystal.Unit) (float64, bool) { return u.Modes[0].ResistanceOhm, true }
	case parttype.ResonanceResistance:
		return func(u crystal.Unit) (float64, bool) {
			_, ohm, err := u.Resonance()
			return ohm, err == nil
		}
	case parttype.LoadResonanceResistance:
		return func(u crystal.Unit) (float64, bool) {
			_, ohm, err := u.LoadResonance(load, how)
			return ohm, err == nil
		}
	case parttype.MotionalCapacitance:
		return func(u crystal.Unit) (float64, bool) { return u.Modes[0].CapacitanceFarad(), true }
	case parttype.ShuntCapacitance:
		return shuntCapacitance
	case parttype.QualityFactor:
		return func(u crystal.Unit) (float64, bool) { return u.Modes[0].QualityFactor(), true }
	case parttype.PullingSensitivity:
		return func(u crystal.Unit) (float64, bool) {
			s, err := u.PullingSensitivity(load, how)
			return s * 1e-6, err == nil // per farad -> ppm per picofarad
		}
	case parttype.PullingRange:
		return func(u crystal.Unit) (float64, bool) {
			r, err := u.PullingRange(l.FromFarad, l.ToFarad, connectionOf(p))
			return r * 1e6, err == nil
		}
	case parttype.StartMargin:
		return func(u crystal.Unit) (float64, bool) {
			ohm, err := startResistance(u, p)
			return -l.NegativeResistanceOhm / ohm, err == nil
		}
	}
	return nil
}

func shuntCapacitance(u crystal.Unit) (float64, bool) { return u.ShuntCapacitanceFarad, true }

// connectionOf returns how a load is connected; a part type of series resonance that limits its pulling means a load in series.
func connectionOf(p *parttype.PartType) crystal.LoadConnection {
	if p.Condition.SeriesResonance {
		return crystal.SeriesLoad
	}
	return p.Condition.Connection
}

// startResistance is what the customer's oscillator has to overcome: RL at the load, or Rr of a unit for series resonance.
func startResistance(u crystal.Unit, p *parttype.PartType) (ohm float64, err error) {
	if p.Condition.SeriesResonance {
		_, ohm, err = u.Resonance()
	} else {
		_, ohm, err = u.LoadResonance(p.Condition.LoadCapacitanceFarad, p.Condition.Connection)
	}
	return ohm, err
}

// contactOf returns the repeat contact of a case.
func contactOf(c *Case) float64 {
	if c.Calibration == nil {
		return network.DefaultContactUncertaintyOhm
	}
	return c.Calibration.ContactUncertaintyOhm
}
