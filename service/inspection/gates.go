package inspection

import (
	"errors"
	"fmt"
	"time"

	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// gate is what must be right before a sweep means anything: calibration, reference, temperature. What is wrong becomes a retest cause;
// the reading is made all the same where it can be, and shown, and not judged.
type gate struct {
	causes      []verdict.RetestCause
	calibration *network.Calibration // as stated, else the nominal network
	solved      *network.Solved      // what the samples are read with; nil: nothing can be read
	scale       bool                 // the network is known, ohms have a meaning
}

func (g *gate) add(cause verdict.Cause, format string, args ...any) {
	g.causes = append(g.causes, verdict.NewCause(cause, fmt.Sprintf(format, args...)))
}

// open looks at everything that a case says of its station. An error is bad input.
func (j *Judge) open(c *Case) (*gate, error) {
	g := &gate{scale: true}
	b := &c.Begin
	if b.ReferenceLock != nil && !*b.ReferenceLock {
		g.add(verdict.ReferenceUnlocked, "The station's source was not locked to its reference clock.")
	}
	if t, p := b.Temperature, c.PartType.Temperature; t != nil && p != nil && !held(t, p.AllowedC) {
		g.add(verdict.TemperatureOutOfRange, "The unit was at %.1f ± %.1f °C (k = 2); the part type allows %s.", t.Celsius, 2*t.StandardUncertainty, rangeText(p.AllowedC.Min, p.AllowedC.Max, "°C"))
	}
	cal := c.Calibration
	if cal == nil {
		cal = nominalFor(c)
	}
	g.calibration = cal
	if len(cal.Standards) == 0 && c.PartType.CalibrationRequired {
		g.add(verdict.CalibrationMissing, "The part type requires a calibration, and contact head %s has none.", b.ContactHead)
	}
	if c.Calibration != nil {
		g.match(b, cal)
	}
	if cal.Network == network.Unknown {
		g.scale = false
		return g, nil
	}
	solve := network.Solve // a nominal network is not worth remembering
	if cal == c.Calibration {
		solve = j.solve
	}
	solved, err := solve(cal)
	var mismatch *network.MismatchError
	switch {
	case errors.As(err, &mismatch):
		g.add(verdict.CalibrationMismatch, "The calibration does not hold: %s.", mismatch.Text)
		nominal := *cal
		nominal.Standards = nil
		if solved, err = network.Solve(&nominal); err != nil {
			return g, nil
		}
	case err != nil:
		return nil, Faultf(Malformed, "calibration", "%w", err)
	}
	g.solved = solved
	return g, nil
}

// match holds a calibration against the head and the time of the inspection.
func (g *gate) match(b *Begin, cal *network.Calibration) {
	if cal.ContactHead != string(b.ContactHead) {
		g.add(verdict.CalibrationMismatch, "The unit was measured with contact head %s; calibration %s belongs to %s.", b.ContactHead, cal.ID, cal.ContactHead)
	}
	if len(cal.Standards) == 0 {
		return // the nominal network does not age
	}
	switch {
	case b.MeasuredAt.After(cal.ExpiresAt()):
		g.add(verdict.CalibrationExpired, "Calibration %s expired at %s; the unit was measured at %s.", cal.ID, cal.ExpiresAt().UTC().Format(time.RFC3339), b.MeasuredAt.UTC().Format(time.RFC3339))
	case b.MeasuredAt.Before(cal.TakenAt):
		g.add(verdict.CalibrationExpired, "Calibration %s was taken at %s, after the unit was measured at %s.", cal.ID, cal.TakenAt.UTC().Format(time.RFC3339), b.MeasuredAt.UTC().Format(time.RFC3339))
	}
}

// nominalFor is the network that stands where no calibration says which one: a reflection port for s11, the samples themselves for
// admittances and impedances, and an unknown network for transmissions.
func nominalFor(c *Case) *network.Calibration {
	kind := network.Unknown
	for i := range c.Sweeps {
		if s := &c.Sweeps[i]; s.Role == sweep.Main || i == 0 {
			kind = network.Unknown
			switch s.Quantity {
			case sweep.S11, sweep.Admittance, sweep.Impedance:
				kind = network.Reflection
			}
		}
	}
	return &network.Calibration{
		Network: kind, ReferenceImpedanceOhm: 50, NominalTerminationOhm: kind.NominalTerminationOhm(),
		SourceLevelUncertaintyDB: network.DefaultSourceLevelUncertaintyDB,
		DriftGainDB:              network.DefaultDriftGainDB, DriftPhaseDeg: network.DefaultDriftPhaseDeg,
		ContactUncertaintyOhm: network.DefaultContactUncertaintyOhm,
	}
}

// suspends reports whether what is wrong with the station or the contact suspends limits on absolute frequency, on everything else, or both.
func suspends(c verdict.Cause) (frequencies, others bool) {
	switch c {
	case verdict.ReferenceUnlocked:
		return true, false // ratios of frequencies and impedances do not depend on the clock
	case verdict.UnstableContact:
		return false, true // a resistance in series moves no frequency
	}
	return true, true
}

// held reports whether a temperature lies in its range, and is known well enough to say so: its expanded uncertainty (k = 2) at most half of the
// range, where there is one on both sides.
func held(t *Temperature, allowed parttype.Bounds) bool {
	if allowed.Min != nil && allowed.Max != nil && 2*t.StandardUncertainty > (*allowed.Max-*allowed.Min)/2 {
		return false
	}
	return within(t.Celsius, allowed.Min, allowed.Max)
}

func within(v float64, low, high *float64) bool {
	return (low == nil || v >= *low) && (high == nil || v <= *high)
}

func rangeText(low, high *float64, unit string) string {
	switch {
	case low != nil && high != nil:
		return fmt.Sprintf("%g to %g %s", *low, *high, unit)
	case low != nil:
		return fmt.Sprintf("at least %g %s", *low, unit)
	}
	return fmt.Sprintf("at most %g %s", *high, unit)
}
