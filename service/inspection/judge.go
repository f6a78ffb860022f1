package inspection

import (
	"context"
	"errors"
	"fmt"
	"sync"

	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// Judge turns a case into a judgement. It depends on the case only; it keeps workspaces and solved calibrations, and is safe for
// concurrent use.
type Judge struct {
	benches sync.Pool // of *bench
	mu      sync.Mutex
	solved  map[*network.Calibration]*network.Solved
	order   []*network.Calibration // of solved, oldest first
}

// bench is what one fit at a time needs, reused.
type bench struct {
	fitter        resonance.Fitter
	terms         network.Terms
	contributions []network.Contribution
	estimate      resonance.Estimate
	frequencyHz   []float64
}

// NewJudge returns a Judge.
func NewJudge() *Judge {
	return &Judge{benches: sync.Pool{New: func() any { return new(bench) }}, solved: map[*network.Calibration]*network.Solved{}}
}

// keptCalibrations is how many solved calibrations a Judge remembers: more than a plant has contact heads.
const keptCalibrations = 2048

// solve returns the solved calibration, from memory if this very calibration was seen before: a Catalogue hands out one shared, immutable
// calibration for each id.
func (j *Judge) solve(c *network.Calibration) (*network.Solved, error) {
	j.mu.Lock()
	s := j.solved[c]
	j.mu.Unlock()
	if s != nil {
		return s, nil
	}
	s, err := network.Solve(c)
	if err != nil {
		return nil, err
	}
	j.mu.Lock()
	defer j.mu.Unlock()
	if j.solved[c] == nil {
		if len(j.order) == keptCalibrations {
			delete(j.solved, j.order[0])
			j.order = j.order[1:]
		}
		j.solved[c] = s
		j.order = append(j.order, c)
	}
	return s, nil
}

// Judge judges one case. An error is bad input (a Fault of kind Malformed) or the context's; a measurement that cannot be judged is a
// verdict.
func (j *Judge) Judge(ctx context.Context, c *Case) (verdict.Judgement, error) {
	if err := CheckScope(c.PartType); err != nil {
		return verdict.Judgement{}, err
	}
	main, err := mainSweep(c)
	if err != nil {
		return verdict.Judgement{}, err
	}
	g, err := j.open(c, main)
	if err != nil {
		return verdict.Judgement{}, err
	}
	if err := ctx.Err(); err != nil {
		return verdict.Judgement{}, err
	}
	b := j.benches.Get().(*bench)
	defer j.benches.Put(b)
	if err := b.fit(c, main, g); err != nil {
		return verdict.Judgement{}, err
	}
	est := &b.estimate
	ev := evidence(c.PartType, est, g)
	out := verdict.Weigh(c.PartType.Decision, ev)
	describe(&out, c.PartType, est)
	if n := len(c.Sweeps) - 1; n > 0 {
		out.Remarks = append(out.Remarks, fmt.Sprintf("%d further sweeps were kept; this part type has no limits that need them.", n))
	}
	return out, nil
}

// mainSweep returns the one sweep that a case must have.
func mainSweep(c *Case) (*sweep.Sweep, error) {
	var main *sweep.Sweep
	count := 0
	for i := range c.Sweeps {
		if c.Sweeps[i].Role == sweep.Main {
			main = &c.Sweeps[i]
			count++
		}
	}
	if count != 1 {
		return nil, Faultf(Malformed, "sweeps", "want one sweep of role main, got %d", count)
	}
	return main, nil
}

// fit fits the main sweep with what the gate lets through.
func (b *bench) fit(c *Case, main *sweep.Sweep, g *gate) error {
	req := resonance.Request{Sweep: main, Expected: expected(c.PartType), ScaleUnknown: !g.scale}
	if cal := c.Calibration; cal != nil {
		req.NoiseRMS = network.SampleNoise(cal, main)
		req.ClockOffset = cal.ReferenceClockOffsetPPM * 1e-6
		req.ClockUncertainty = cal.ReferenceClockUncertaintyPPM * 1e-6
	}
	if g.solved != nil {
		err := g.solved.Terms(&b.terms, main.FrequencyHz, main.Quantity)
		var mismatch *network.MismatchError
		switch {
		case errors.As(err, &mismatch):
			// The sweep leaves the calibrated band: no terms, no reading.
			g.add(verdict.CalibrationMismatch, "%s.", mismatch.Text)
			b.estimate = resonance.Estimate{State: resonance.CalibrationMismatch, Detail: mismatch.Text}
			return nil
		case err != nil:
			return Faultf(Malformed, "quantity", "%w", err)
		}
		req.Terms = &b.terms
		if b.contributions, err = g.solved.Contributions(b.contributions[:0], main.FrequencyHz, main.Quantity); err != nil {
			return Faultf(Malformed, "calibration", "%w", err)
		}
		req.Contributions = b.contributions
	} else if g.scale {
		b.estimate = resonance.Estimate{State: resonance.CalibrationMismatch}
		return nil
	}
	b.fitter.Fit(&req, &b.estimate)
	addContact(&b.estimate, contactOf(c))
	return nil
}

// expected are start values from the part type: where the unit should be, and what its limits allow.
func expected(p *parttype.PartType) resonance.Expected {
	e := resonance.Expected{ResonanceHz: p.NominalFrequencyHz}
	for _, l := range p.Limits {
		switch l.Quantity {
		case parttype.MotionalResistance, parttype.ResonanceResistance, parttype.LoadResonanceResistance:
			if e.ResistanceOhm == 0 && l.Bounds.Max != nil {
				e.ResistanceOhm = *l.Bounds.Max / 2
			}
		case parttype.ShuntCapacitance:
			if l.Bounds.Max != nil {
				e.ShuntCapacitanceFarad = *l.Bounds.Max / 2
			}
		}
	}
	return e
}
