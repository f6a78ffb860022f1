package inspection

import (
	"context"
	"fmt"
	"runtime"
	"sync"
	"weak"

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
	solved  map[weak.Pointer[network.Calibration]]*network.Solved // as long as the calibration itself lives
}

// NewJudge returns a Judge.
func NewJudge() *Judge {
	return &Judge{benches: sync.Pool{New: func() any { return new(bench) }}, solved: map[weak.Pointer[network.Calibration]]*network.Solved{}}
}

// solve returns the solved calibration, from memory if this very calibration was seen before: a Catalogue hands out one shared, immutable
// calibration for each id. One that came alone, with a single case, is forgotten with it.
func (j *Judge) solve(c *network.Calibration) (*network.Solved, error) {
	key := weak.Make(c)
	j.mu.Lock()
	s := j.solved[key]
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
	if j.solved[key] == nil {
		j.solved[key] = s
		runtime.AddCleanup(c, j.forget, key)
	}
	return s, nil
}

// forget drops the solution of a calibration that is gone.
func (j *Judge) forget(key weak.Pointer[network.Calibration]) {
	j.mu.Lock()
	defer j.mu.Unlock()
	delete(j.solved, key)
}

// Judge judges one case. An error is bad input (a Fault of kind Malformed) or the context's; a measurement that cannot be judged is a
// verdict.
func (j *Judge) Judge(ctx context.Context, c *Case) (verdict.Judgement, error) {
	if err := CheckScope(c.PartType); err != nil {
		return verdict.Judgement{}, err
	}
	if err := checkSweeps(c); err != nil {
		return verdict.Judgement{}, err
	}
	g, err := j.open(c)
	if err != nil {
		return verdict.Judgement{}, err
	}
	b := j.benches.Get().(*bench)
	b.used = 0
	defer j.benches.Put(b)
	w := workup{c: c, p: c.PartType, g: g, main: -1, fits: make([]*fitted, len(c.Sweeps))}
	if err := w.fit(ctx, b); err != nil {
		return verdict.Judgement{}, err
	}
	return w.judge()
}

// checkSweeps holds the sweeps of a case together against the part type: exactly one is the main one, drive steps exist, no sweep can overdrive
// the unit. A series that ended after a low level out of limit may have no main sweep; whether it did is known once it is fitted.
func checkSweeps(c *Case) error {
	main, drive := 0, 0
	for i := range c.Sweeps {
		s := &c.Sweeps[i]
		field := fmt.Sprintf("sweeps[%d]", i)
		switch s.Role {
		case sweep.Main:
			main++
		case sweep.Drive:
			drive++
			if d := c.PartType.Drive; d != nil && s.DriveStep >= len(d.LevelsWatt) {
				return Faultf(Malformed, field+".drive_step", "want 0 to %d, the levels of %s, got %d", len(d.LevelsWatt)-1, c.PartType.Name, s.DriveStep)
			}
		}
		if err := checkCeiling(c.PartType, c.Calibration, s, field); err != nil {
			return err
		}
	}
	if main != 1 && !(main == 0 && drive > 0 && c.PartType.Drive != nil) {
		return mainMissing(main)
	}
	return nil
}

func mainMissing(count int) error {
	return Faultf(Malformed, "sweeps", "want one sweep of role main, got %d", count)
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
