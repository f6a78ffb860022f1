package accuracy

import (
	"fmt"
	"math/rand/v2"
	"time"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// settlingRow is a sweep of which more or less is said: dwell in loaded time constants, the share of it that is averaged, what the source
// does at a step and what is said of that.
type settlingRow struct {
	dwell, averaged float64
	phase, said     sweep.SourcePhase
}

// tooFast says that the sweep must be refused: the source restarts its phase and stays for less than seven loaded time constants.
func (s settlingRow) tooFast() bool {
	return s.said == sweep.PhaseRestarted && s.dwell < settlingTimeConstants
}

func (o Options) settlingRows() []settlingRow {
	dwells := []float64{2, 6, 7.5, 10, 20, 60}
	if o.Short {
		dwells = []float64{6, 10}
	}
	var rows []settlingRow
	for _, dwell := range dwells {
		for _, averaged := range []float64{1, 0.2} {
			rows = append(rows,
				settlingRow{dwell, averaged, sweep.PhaseRestarted, sweep.PhaseRestarted},
				settlingRow{dwell, averaged, sweep.PhaseRestarted, sweep.PhaseUnstated},
				settlingRow{dwell, averaged, sweep.PhaseContinuous, sweep.PhaseUnstated},
				settlingRow{dwell, averaged, sweep.PhaseContinuous, sweep.PhaseContinuous})
		}
	}
	return rows
}

// settlingShare is the share of the trials that a cell of this table gets: errors here are of the model, not of chance.
const settlingShare = 10

// Settling measures sweeps at the border of settled, and sources that start anew at each step. The gates: a source that is said to restart its
// phase below seven loaded time constants is answered swept_too_fast; and whatever is answered is right (answers).
func Settling(o Options, r *trial.Report) error {
	o.Trials = max(20, o.Trials/settlingShare)
	t := r.Table(fmt.Sprintf("Settling: 60 dB, 401 points over +-5 loaded bandwidths, dwell and averaging stated, %d trials a cell", o.Trials), "unit", "dwell/tau",
		"averaged", "source", "said to be", "dfs/bound", "dR1/bound", "wrong %", "states")
	defer t.Close()
	var all answers
	for _, row := range o.settlingRows() {
		if err := row.measure(o, r, t, scenario()[2], &all); err != nil {
			return err
		}
	}
	all.checkAll(r, "settling")
	return nil
}

func (s settlingRow) measure(o Options, r *trial.Report, t *trial.Table, p place, all *answers) error {
	dwell := time.Duration(s.dwell * p.timeConstantSeconds() * 1e9)
	timing := sweep.Timing{Dwell: dwell, Averaging: time.Duration(s.averaged * float64(dwell)), Phase: s.phase}
	said := string(s.said)
	if said == "" {
		said = "unstated"
	}
	name := fmt.Sprintf("settling, %s, dwell %g tau, averaged %g, source %s, said to be %s", p.name, s.dwell, s.averaged, s.phase, said)
	c, err := newCell(name, p, p.grid(-5, 5, 401), 60, sweep.S21, timing)
	if err != nil {
		return err
	}
	outcomes := c.measure(o, true, func(b *bench, rng *rand.Rand) {
		alternate(b, rng)
		b.sweep.Timing.Phase = s.said
	})
	mine := answersOf(outcomes)
	all.add(mine)
	mine.check(r, name)
	refused := 0
	for _, out := range outcomes {
		if out.state == resonance.SweptTooFast {
			refused++
		}
	}
	t.Row(p.name, s.dwell, s.averaged, s.phase, said, fmt.Sprintf("%+.1f", c.spread(outcomes, bound.ResonanceHz).PlainBias),
		fmt.Sprintf("%+.1f", c.spread(outcomes, bound.ResistanceOhm).PlainBias), mine.wrongPercent(), states(outcomes))
	if s.tooFast() && refused < len(outcomes) {
		r.Fail("%s: %v, want %s", name, states(outcomes), resonance.SweptTooFast)
	}
	return nil
}
