package inspection

import (
	"context"
	"fmt"
	"math"

	"example.com/admit/service/parttype"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// workup is one case on its way from fitted sweeps to evidence: each section of the limits file adds its limits with their readings, the
// retest causes of the sweeps that they need, and what else is worth telling.
type workup struct {
	c    *Case
	p    *parttype.PartType
	g    *gate
	fits []*fitted // beside the sweeps of the case; nil where a sweep is not fitted
	main int       // index of the main sweep, -1 for none

	nominal *fitted // the reading that the limits section is held against; nil: none
	series  series
	ev      verdict.Evidence

	drive         []verdict.DriveReading
	modes         []verdict.ModeReading
	observability []verdict.Observability
	shunt         *verdict.Value
	shuntQuantity *quantity
	remarks       []string
}

// fit fits every sweep that shows the main mode or an overtone: the main one first, since the others are looked for from it.
func (w *workup) fit(ctx context.Context, b *bench) (err error) {
	for i := range w.c.Sweeps {
		if w.c.Sweeps[i].Role == sweep.Main {
			w.main = i
		}
	}
	start := expected(w.p)
	fitOne := func(i int, from resonance.Expected) (err error) {
		if err := ctx.Err(); err != nil {
			return err
		}
		w.fits[i], err = b.fit(w.c, i, from, w.g)
		return err
	}
	if w.main >= 0 {
		if err := fitOne(w.main, start); err != nil {
			return err
		}
		start = expectedLike(w.fits[w.main], start)
	}
	for i := range w.c.Sweeps {
		if w.c.Sweeps[i].Role == sweep.Drive && w.p.Drive != nil {
			if err := fitOne(i, start); err != nil {
				return err
			}
			if w.main < 0 {
				start = expectedLike(w.fits[i], start)
			}
		}
	}
	w.readSeries()
	if err := w.lookForJump(b); err != nil {
		return err
	}
	for i := range w.c.Sweeps {
		if s := &w.c.Sweeps[i]; s.Role == sweep.Overtone {
			if err = ctx.Err(); err != nil {
				return err
			}
			if w.fits[i], err = w.fitOvertone(b, i, w.expectedOvertone(s, start)); err != nil {
				return err
			}
		}
	}
	return w.readShunt(b)
}

// expectedLike returns what other sweeps of a unit are started from: what one sweep of it showed.
func expectedLike(f *fitted, otherwise resonance.Expected) resonance.Expected {
	if !f.sound() {
		return otherwise
	}
	otherwise.ResonanceHz = f.est.Value[resonance.ResonanceHz]
	if f.est.ScaleUnknown {
		return otherwise
	}
	u := f.est.Unit()
	otherwise.ResistanceOhm, otherwise.InductanceHenry = u.Modes[0].ResistanceOhm, u.Modes[0].InductanceHenry
	if u.ShuntCapacitanceFarad > 0 {
		otherwise.ShuntCapacitanceFarad = u.ShuntCapacitanceFarad
	}
	return otherwise
}

// judge gathers the evidence and weighs it.
func (w *workup) judge() (verdict.Judgement, error) {
	w.identity()
	w.contact()
	w.ev = verdict.Evidence{
		Causes: append([]verdict.RetestCause(nil), w.g.causes...), Past: w.c.Background.Readings,
		AttemptsUsed: w.c.Background.AttemptsUsed, Uncounted: w.c.Begin.Purpose != Production && w.c.Begin.Purpose != "",
	}
	w.driveLimits()
	if w.main < 0 && !w.series.endedEarly() {
		return verdict.Judgement{}, mainMissing(0)
	}
	// The order of the part type: limits, drive, overtones.
	drive := w.ev
	w.ev.Limits, w.ev.Readings, w.ev.Joint = nil, nil, nil
	w.mainLimits()
	w.append(&drive)
	w.overtoneLimits()
	out := verdict.Weigh(w.p.Decision, w.ev)
	w.describe(&out)
	w.grade(&out)
	return out, nil
}

// append adds limits gathered before, with their readings.
func (w *workup) append(ev *verdict.Evidence) {
	first := len(w.ev.Limits)
	w.ev.Limits = append(w.ev.Limits, ev.Limits...)
	w.ev.Readings = append(w.ev.Readings, ev.Readings...)
	for _, g := range ev.Joint {
		moved := g
		moved.Members = nil
		for _, m := range g.Members {
			moved.Members = append(moved.Members, first+m)
		}
		w.ev.Joint = append(w.ev.Joint, moved)
	}
}

// limit adds one limit with its reading.
func (w *workup) limit(l parttype.Limit, r verdict.Reading) {
	w.ev.Limits = append(w.ev.Limits, l)
	w.ev.Readings = append(w.ev.Readings, r)
}

// cause notes a retest cause, once each.
func (w *workup) cause(c verdict.RetestCause) {
	if !namedCause(w.ev.Causes, c.Cause) {
		w.ev.Causes = append(w.ev.Causes, c)
	}
}

// suspendedBy returns what suspends a limit that rests on some sweeps: what is wrong with the station, and with these sweeps. The causes of the
// sweeps are noted on the way.
func (w *workup) suspendedBy(absoluteFrequency bool, sweeps ...*fitted) (causes []verdict.Cause) {
	for _, c := range w.g.causes {
		if frequencies, others := suspends(c.Cause); absoluteFrequency && frequencies || !absoluteFrequency && others {
			causes = append(causes, c.Cause)
		}
	}
	for _, f := range sweeps {
		if c, bad := causeOf(f.est); bad {
			w.cause(c)
			causes = append(causes, c.Cause)
		}
	}
	return causes
}

// value fills a quantity into a reading.
func value(r *verdict.Reading, q quantity, ok bool) {
	if ok {
		r.Measured, r.CommonUncertainty, r.HasValue = q.measured()
	}
}

// remark adds a sentence for the test engineer.
func (w *workup) remark(format string, args ...any) {
	w.remarks = append(w.remarks, fmt.Sprintf(format, args...))
}

// near reports whether two positive numbers agree within a share of the second.
func near(a, b, share float64) bool { return math.Abs(a-b) <= share*b }
