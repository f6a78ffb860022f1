package inspection

import (
	"errors"

	"example.com/admit/service/crystal"
	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// bench is what the judgement of one case needs, reused from case to case.
type bench struct {
	fitter        resonance.Fitter
	terms         network.Terms
	contributions []network.Contribution
	estimates     []*resonance.Estimate
	used          int // of estimates
}

// estimate returns an estimate to be filled, from those of earlier cases where there is one.
func (b *bench) estimate() *resonance.Estimate {
	if b.used == len(b.estimates) {
		b.estimates = append(b.estimates, new(resonance.Estimate))
	}
	b.used++
	return b.estimates[b.used-1]
}

// fitted is one sweep with what the fit made of it.
type fitted struct {
	sweep *sweep.Sweep
	index int // in the case
	est   *resonance.Estimate

	drive   network.Drive
	driven  bool          // the power in R1 is known
	loudest network.Terms // of the one point at which it is highest
}

// fit fits one sweep with what the gate lets through. An error is bad input.
func (b *bench) fit(c *Case, index int, expected resonance.Expected, g *gate) (*fitted, error) {
	s := &c.Sweeps[index]
	f := &fitted{sweep: s, index: index, est: b.estimate()}
	if !g.calibration.Network.Gives(s.Quantity) && g.scale {
		return nil, Faultf(Malformed, "quantity", "a %s gives no %s", g.calibration.Network, s.Quantity)
	}
	req := resonance.Request{Sweep: s, Expected: expected, ScaleUnknown: !g.scale}
	if cal := c.Calibration; cal != nil {
		req.NoiseRMS = network.SampleNoise(cal, s)
		req.ClockOffset = cal.ReferenceClockOffsetPPM * 1e-6
		req.ClockUncertainty = cal.ReferenceClockUncertaintyPPM * 1e-6
	}
	if g.solved != nil {
		err := g.solved.Terms(&b.terms, s.FrequencyHz, s.Quantity)
		var mismatch *network.MismatchError
		switch {
		case errors.As(err, &mismatch):
			// The sweep leaves the calibrated band: no terms, no reading.
			*f.est = resonance.Estimate{State: resonance.CalibrationMismatch, Detail: mismatch.Text}
			return f, nil
		case err != nil:
			return nil, Faultf(Malformed, "quantity", "%w", err)
		}
		req.Terms = &b.terms
		if b.contributions, err = g.solved.Contributions(b.contributions[:0], s.FrequencyHz, s.Quantity); err != nil {
			return nil, Faultf(Malformed, "calibration", "%w", err)
		}
		req.Contributions = b.contributions
	} else if g.scale {
		*f.est = resonance.Estimate{State: resonance.CalibrationMismatch}
		return f, nil
	}
	b.fitter.Fit(&req, f.est)
	if readable(f.est) {
		f.findLoudest(g, req.Terms)
		if c.PartType.Drive != nil && s.Role != sweep.Overtone {
			b.unbend(f, &req)
		}
	}
	addContact(f.est, contactOf(c))
	return f, nil
}

// findLoudest finds the point of the sweep at which the power in R1 is highest.
func (f *fitted) findLoudest(g *gate, terms *network.Terms) {
	drive, err := g.calibration.Drive()
	if err != nil || f.sweep.SourcePowerDBm == nil {
		return
	}
	_, i, err := drive.HighestPowerWatt(f.sweep, terms, f.est.Unit())
	if err != nil {
		return
	}
	f.drive, f.driven = drive, true
	f.loudest = network.Terms{
		FrequencyHz: []float64{terms.FrequencyHz[i]}, A: []complex128{terms.A[i]}, B: []complex128{terms.B[i]}, C: []complex128{terms.C[i]}, D: terms.D,
	}
}

// sourceLevelInfluence is the name of the uncertainty of the source's level.
const sourceLevelInfluence = "source_level"

// powerWatt returns the highest rms power in R1 over the sweep with its uncertainty; ok is false where it is not known.
func (f *fitted) powerWatt() (v verdict.Value, ok bool) {
	if !f.driven {
		return v, false
	}
	q, ok := quantityOfOne(f.est, func(u crystal.Unit) (float64, bool) {
		return f.drive.PowerAtPointWatt(*f.sweep.SourcePowerDBm, u, &f.loudest, 0), true
	})
	if !ok {
		return v, false
	}
	q.add(influenceKey{sourceLevelInfluence, ""}, q.value*f.drive.RelativePowerUncertainty())
	v, _, ok = q.measured()
	return v, ok
}

// powerInWatt returns the power that the same source would put into the unit if its R1 were another.
func (f *fitted) powerInWatt(resistanceOhm float64) float64 {
	u := f.est.Unit()
	u.Modes[0].ResistanceOhm = resistanceOhm
	return f.drive.PowerAtPointWatt(*f.sweep.SourcePowerDBm, u, &f.loudest, 0)
}

// resistanceOhm and resonanceHz are the quantities of the main mode that drive and contact are told by.
func (f *fitted) resistanceOhm() (quantity, bool) {
	return quantityOfOne(f.est, func(u crystal.Unit) (float64, bool) { return u.Modes[0].ResistanceOhm, true })
}

func (f *fitted) resonanceHz() (quantity, bool) {
	return quantityOfOne(f.est, func(u crystal.Unit) (float64, bool) { return u.Modes[0].ResonanceHz, true })
}

// sound reports whether the sweep gave an estimate that can be trusted.
func (f *fitted) sound() bool { return f != nil && f.est.State == resonance.Found }
