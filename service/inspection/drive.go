package inspection

import (
	"fmt"
	"math"
	"strings"

	"example.com/admit/service/crystal"
	"example.com/admit/service/parttype"
	"example.com/admit/service/resonance"
	"example.com/admit/service/verdict"
)

// driveLimits holds every level of the series against the limits of the drive section. Differences and ratios between levels take the common
// influences once: what shifts both readings alike does not show in them.
func (w *workup) driveLimits() {
	d := w.p.Drive
	if d == nil {
		return
	}
	w.lowDriveFirst()
	w.noteSeries()
	if d.ResistanceRatio != nil {
		w.eachLevel(parttype.DriveResistanceRatio, func(k int) (parttype.Limit, verdict.Reading, quantity, bool) { return w.ratioAt(k) })
	}
	if b := d.MotionalResistance; b.Min != nil || b.Max != nil {
		w.eachLevel(parttype.DriveMotionalResistance, func(k int) (parttype.Limit, verdict.Reading, quantity, bool) { return w.resistanceAt(k) })
	}
	if b := d.FrequencyShiftPPM; b.Min != nil || b.Max != nil {
		w.eachLevel(parttype.DriveFrequencyShift, func(k int) (parttype.Limit, verdict.Reading, quantity, bool) { return w.shiftAt(k) })
	}
	if b := d.ReturnShiftPPM; len(d.ReturnSteps) == 2 && (b.Min != nil || b.Max != nil) {
		from, to := &w.series.levels[d.ReturnSteps[0]], &w.series.levels[d.ReturnSteps[1]]
		limit := parttype.Limit{Quantity: parttype.DriveReturnShift, Decide: d.ReturnShiftDecide}
		r := w.levelReading(limit.Quantity, to.step, from, to)
		q, ok := frequencyShift(from.fit, to.fit)
		limit.Bounds = signedBounds(b, &q)
		value(&r, q, ok)
		w.limit(limit, r)
	}
	w.readLevels()
}

// eachLevel adds one limit for each level, and binds them together as one on the extreme of all levels.
func (w *workup) eachLevel(of parttype.Quantity, at func(k int) (parttype.Limit, verdict.Reading, quantity, bool)) {
	n := len(w.series.levels)
	j := verdict.Joint{Individual: make([]float64, n*n), Common: make([]float64, n*n)}
	quantities, there := make([]quantity, n), make([]bool, n)
	for k := range n {
		limit, r, q, ok := at(k)
		limit.Quantity, r.Quantity = of, of
		value(&r, q, ok)
		j.Members = append(j.Members, len(w.ev.Limits))
		quantities[k], there[k] = q, ok
		w.limit(limit, r)
	}
	for a := range n {
		for b := range n {
			if there[a] && there[b] {
				j.Individual[a*n+b], j.Common[a*n+b] = quantities[a].covariance(&quantities[b])
			}
		}
	}
	w.ev.Joint = append(w.ev.Joint, j)
}

// levelReading returns an empty reading about a step that rests on some levels, with what suspends it.
func (w *workup) levelReading(of parttype.Quantity, step int, levels ...*level) verdict.Reading {
	where := verdict.Nowhere
	where.DriveStep = step
	r := verdict.Reading{Quantity: of, Where: where, Unit: unitOf(of), SuspendedBy: w.suspendedBy(false)}
	suspend := func(c verdict.Cause, note string) {
		r.SuspendedBy = append(r.SuspendedBy, c)
		if r.Note == "" {
			r.Note = note
		}
	}
	if !w.g.scale {
		suspend(verdict.CalibrationMissing, "the power in the unit cannot be told in an unknown network")
		w.cause(verdict.NewCause(verdict.CalibrationMissing, "The fixture network is not known: the power in the unit cannot be told."))
	}
	if w.series.broken != "" {
		suspend(verdict.DriveOrderBroken, w.series.broken)
	}
	for _, l := range levels {
		switch {
		case w.series.high && l.wanted < w.p.DriveLevelWatt:
			suspend(verdict.HighResistanceAtLowDrive, "to be looked at again")
		case l.fit == nil && w.series.high:
			suspend(verdict.HighResistanceAtLowDrive, fmt.Sprintf("step %d was not measured", l.step))
		case l.fit == nil:
			suspend(verdict.DriveLevelMissed, fmt.Sprintf("step %d was not measured", l.step))
		case !l.fit.sound():
			r.SuspendedBy = append(r.SuspendedBy, w.suspendedBy(false, l.fit)...)
		case l.missed != "":
			suspend(verdict.DriveLevelMissed, l.missed)
		}
	}
	return r
}

// withReference suspends a reading that is to be compared with one at the drive level where there is none.
func (w *workup) withReference(r *verdict.Reading) bool {
	if w.series.reference != nil {
		return true
	}
	r.Note = "there is no reading at the drive level to compare with"
	switch f := w.unsoundReference(); {
	case f != nil:
		r.SuspendedBy = append(r.SuspendedBy, w.suspendedBy(false, f)...)
	case w.series.high:
		r.SuspendedBy = append(r.SuspendedBy, verdict.HighResistanceAtLowDrive)
	default:
		r.SuspendedBy = append(r.SuspendedBy, verdict.DriveLevelMissed)
	}
	return false
}

// unsoundReference returns the sweep that should have been the reading at the drive level and gave none; nil when there is none of these.
func (w *workup) unsoundReference() *fitted {
	for k := range w.series.levels {
		if l := &w.series.levels[k]; near(l.wanted, w.p.DriveLevelWatt, 1e-6) && l.fit != nil && !l.fit.sound() {
			return l.fit
		}
	}
	if w.main >= 0 && !w.fits[w.main].sound() {
		return w.fits[w.main]
	}
	return nil
}

// ratioAt returns the resistance ratio of a level to the drive level.
func (w *workup) ratioAt(k int) (limit parttype.Limit, r verdict.Reading, q quantity, ok bool) {
	d, l := w.p.Drive, &w.series.levels[k]
	limit = parttype.Limit{Quantity: parttype.DriveResistanceRatio, Decide: d.ResistanceRatioDecide}
	r = w.levelReading(limit.Quantity, k, l)
	most := d.ResistanceRatio[len(d.ResistanceRatio)-1].Max
	if w.withReference(&r) {
		reference := w.series.reference.est
		most = ratioBound(d.ResistanceRatio, math.Exp(reference.Value[resonance.LogResistance]))
		if l.fit.sound() && w.g.scale {
			q, ok = quantityFrom([]*resonance.Estimate{l.fit.est, reference}, func(u []crystal.Unit) (float64, bool) {
				return u[0].Modes[0].ResistanceOhm / u[1].Modes[0].ResistanceOhm, true
			})
		}
	}
	limit.Bounds = parttype.Bounds{Max: &most}
	return limit, r, q, ok
}

// resistanceAt returns R1 at a level.
func (w *workup) resistanceAt(k int) (limit parttype.Limit, r verdict.Reading, q quantity, ok bool) {
	d, l := w.p.Drive, &w.series.levels[k]
	limit = parttype.Limit{Quantity: parttype.DriveMotionalResistance, Bounds: d.MotionalResistance, Decide: d.MotionalResistanceDecide}
	r = w.levelReading(limit.Quantity, k, l)
	if l.fit.sound() && w.g.scale {
		q, ok = l.fit.resistanceOhm()
	}
	return limit, r, q, ok
}

// shiftAt returns the frequency shift of a level against the drive level.
func (w *workup) shiftAt(k int) (limit parttype.Limit, r verdict.Reading, q quantity, ok bool) {
	d, l := w.p.Drive, &w.series.levels[k]
	limit = parttype.Limit{Quantity: parttype.DriveFrequencyShift, Decide: d.FrequencyShiftDecide}
	r = w.levelReading(limit.Quantity, k, l)
	if w.withReference(&r) {
		q, ok = frequencyShift(w.series.reference, l.fit)
	}
	limit.Bounds = signedBounds(d.FrequencyShiftPPM, &q)
	return limit, r, q, ok
}

// frequencyShift returns (fs(to) - fs(from))/fs(from) in ppm.
func frequencyShift(from, to *fitted) (q quantity, ok bool) {
	if !from.sound() || !to.sound() {
		return q, false
	}
	return quantityFrom([]*resonance.Estimate{from.est, to.est}, func(u []crystal.Unit) (float64, bool) {
		a, b := u[0].Modes[0].ResonanceHz, u[1].Modes[0].ResonanceHz
		return (b - a) / a * 1e6, true
	})
}

// signedBounds turns the limit of a magnitude into one on the value with its sign, which says more and is normally distributed: at most 2 becomes
// -2 to 2. A least magnitude leaves no interval; then the value itself loses its sign.
func signedBounds(b parttype.Bounds, q *quantity) parttype.Bounds {
	if b.Max != nil && (b.Min == nil || *b.Min <= 0) {
		low, high := -*b.Max, *b.Max
		return parttype.Bounds{Min: &low, Max: &high}
	}
	if q.value < 0 {
		q.value = -q.value
		for i := range q.gradients {
			for p := range q.gradients[i] {
				q.gradients[i][p] = -q.gradients[i][p]
			}
		}
		for i := range q.influences {
			q.influences[i].shift = -q.influences[i].shift
		}
	}
	return b
}

// lowDriveFirst looks at the first level before all others: a unit whose resistance is high there may be badly seated, or it may sleep. The first time
// it is seated again; the second time it has failed, and no later attempt overturns that.
func (w *workup) lowDriveFirst() {
	d, l := w.p.Drive, &w.series.levels[0]
	before := w.c.Background.HighAtLowDrive
	if before >= 2 {
		w.ev.Condemned = fmt.Sprintf("The resistance at low drive was high in %d earlier attempts; no later attempt overturns that.", before)
	}
	if !(l.wanted < w.p.DriveLevelWatt) || !l.usable() || w.series.broken != "" {
		return
	}
	var found string
	check := func(limit parttype.Limit, r verdict.Reading, q quantity, ok bool) {
		value(&r, q, ok)
		if f := verdict.Hold(limit, r, w.ev.Past, w.p.Decision); f.Outcome == verdict.Violates && found == "" {
			found = f.Text
		}
	}
	if b := d.MotionalResistance; b.Max != nil {
		check(w.resistanceAt(0))
	}
	if d.ResistanceRatio != nil && w.series.reference != nil {
		check(w.ratioAt(0))
	}
	if found == "" {
		return
	}
	w.series.high = before == 0
	text := fmt.Sprintf("At the first level of %s: %s.", verdict.FormatBound(l.wanted, verdict.UnitWatt), found)
	if before > 0 {
		text += " It was so in an earlier attempt too."
	}
	w.cause(verdict.NewCause(verdict.HighResistanceAtLowDrive, text))
}

// noteSeries notes what is wrong with the series as a whole.
func (w *workup) noteSeries() {
	s := &w.series
	if s.broken != "" {
		w.cause(verdict.NewCause(verdict.DriveOrderBroken, sentence(s.broken)))
	}
	var missing, missed []string
	for k := range s.levels {
		switch l := &s.levels[k]; {
		case l.fit == nil && !s.high:
			missing = append(missing, fmt.Sprintf("step %d", l.step))
		case l.fit != nil && l.missed != "":
			missed = append(missed, l.missed)
		}
	}
	if len(missing) > 0 {
		missed = append(missed, strings.Join(missing, ", ")+" of the drive series not measured")
	}
	if len(missed) > 0 {
		w.cause(verdict.NewCause(verdict.DriveLevelMissed, sentence(strings.Join(missed, "; "))))
	}
	if s.reference == nil && !s.high && len(missed) == 0 && w.unsoundReference() == nil {
		w.cause(verdict.NewCause(verdict.DriveLevelMissed, "There is no reading at the drive level to compare the others with."))
	}
}

// readLevels tells what was measured at each level, and how the resistance changes with it.
func (w *workup) readLevels() {
	for k := range w.series.levels {
		l := &w.series.levels[k]
		if l.fit == nil || !l.powered || !l.fit.sound() {
			continue
		}
		r, ok1 := l.fit.resistanceOhm()
		f, ok2 := l.fit.resonanceHz()
		if !ok1 || !ok2 {
			continue
		}
		reading := verdict.DriveReading{Step: l.step, PowerWatt: l.power}
		reading.MotionalResistanceOhm, _, ok1 = r.measured()
		reading.MotionalResonanceHz, _, ok2 = f.measured()
		if ok1 && ok2 {
			w.drive = append(w.drive, reading)
		}
	}
	w.describeSleep()
}

// Above this ratio, and by more than three standard uncertainties, a resistance at the first low level counts as high in words; judged is by the
// limits alone.
const highRatio = 1.1

// describeSleep names a unit whose resistance is high at low drive, and whether the drive of the series cured it.
func (w *workup) describeSleep() {
	levels := w.series.levels
	first := &levels[0]
	if !first.fit.sound() || !w.g.scale || !(first.wanted < w.p.DriveLevelWatt) {
		return
	}
	ratio := func(over *fitted) (value float64, isHigh bool) {
		q, ok := quantityFrom([]*resonance.Estimate{first.fit.est, over.est}, func(u []crystal.Unit) (float64, bool) {
			return u[0].Modes[0].ResistanceOhm / u[1].Modes[0].ResistanceOhm, true
		})
		if !ok {
			return 0, false
		}
		v, _, ok := q.measured()
		return v.Value, ok && v.Value > highRatio && v.Value-1 > 3*v.StandardUncertainty
	}
	var high, back *level // the strongest level after the first, and the last one at the level of the first behind a higher one
	risen := false
	for k := 1; k < len(levels); k++ {
		l := &levels[k]
		higher := l.wanted > first.wanted*(1+1e-6)
		risen = risen || higher && l.fit != nil
		switch {
		case !l.fit.sound():
		case higher && (high == nil || l.wanted > high.wanted):
			high = l
		case risen && near(l.wanted, first.wanted, 1e-6):
			back = l
		}
	}
	strong, falls := 0.0, false
	if high != nil {
		strong, falls = ratio(high.fit)
	}
	cured := false
	if back != nil {
		var again float64
		again, cured = ratio(back.fit)
		cured = cured && again > 1+(strong-1)/2
	}
	if !falls && !cured {
		return
	}
	ohm := func(l *level) string {
		return verdict.FormatBound(significant(math.Exp(l.fit.est.Value[resonance.LogResistance])), verdict.UnitOhm)
	}
	text := fmt.Sprintf("The unit sleeps: at low drive (%s) its motional resistance is high, %s", verdict.FormatBound(first.wanted, verdict.UnitWatt), ohm(first))
	if falls {
		text += fmt.Sprintf(" and %s at %s", ohm(high), verdict.FormatBound(high.wanted, verdict.UnitWatt))
	}
	switch {
	case cured:
		text += fmt.Sprintf("; strong drive cured it, and %s are left when the level returns. The cure need not last: a test right after it proves nothing", ohm(back))
	case back != nil:
		text += fmt.Sprintf("; strong drive did not cure it, it is %s when the level returns", ohm(back))
	}
	w.remark("%s.", text)
}
