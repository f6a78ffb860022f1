package accuracy

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// lostBandwidths is how far from the truth fs counts as lost: half a loaded bandwidth is a dozen standard deviations at 5 dB a point.
const lostBandwidths = 0.5

// Lost counts the fits that end anywhere but at the unit: at 5 dB a point, and with one point in a hundred wild by half the response. The gate is
// none. Half the trials are told what the part type expects.
func Lost(o Options, r *trial.Report) error {
	return lostRows(o, r, []lostRow{{5, 0}, {50, 0.5}, {20, 0.5}})
}

// FarOut is Lost with points wild by five times the response.
func FarOut(o Options, r *trial.Report) error {
	return lostRows(o, r, []lostRow{{50, 5}})
}

type lostRow struct{ snr, wild float64 }

func lostRows(o Options, r *trial.Report, rows []lostRow) error {
	t := r.Table(fmt.Sprintf("Lost fits: 401 points over +-5 loaded bandwidths, %d trials a cell", o.Trials), "unit", "SNR dB", "wild points",
		"lost", "fs sd/bound", "R1 sd/bound", "states")
	defer t.Close()
	for _, p := range o.places() {
		for _, c := range rows {
			if err := lost(o, r, t, p, c.snr, c.wild); err != nil {
				return err
			}
		}
	}
	return nil
}

// lost measures one cell; wild is the length of the wild points over the response, 0 for none.
func lost(o Options, r *trial.Report, t *trial.Table, p place, snr, wild float64) error {
	name := fmt.Sprintf("lost fits, %s, %g dB, wild %g", p.name, snr, wild)
	c, err := newCell(name, p, p.grid(-5, 5, 401), snr, sweep.S21, sweep.Timing{})
	if err != nil {
		return err
	}
	outcomes := c.measure(o, false, func(b *bench, rng *rand.Rand) {
		alternate(b, rng)
		if wild == 0 {
			return
		}
		for i := range b.noise {
			if rng.Float64() < 0.01 {
				b.put(i, complex(b.sweep.Re[i], b.sweep.Im[i])+cmplx.Rect(wild*p.response(), 2*math.Pi*rng.Float64()))
			}
		}
	})
	count, unanswered := 0, 0
	for _, out := range outcomes {
		if out.state == resonance.TooNoisy {
			unanswered++ // a retest, and rightly: once in some fifty thousand sweeps at 5 dB the noise hides the width
			continue
		}
		if out.state != resonance.Found || math.Abs(out.readings[bound.ResonanceHz].Error) > lostBandwidths*p.loadedBandwidthHz() {
			count++
		}
	}
	label := "none"
	if wild > 0 {
		label = fmt.Sprintf("1 %% by %g", wild)
	}
	t.Row(p.name, snr, label, count, c.spread(outcomes, bound.ResonanceHz).Ratio, c.spread(outcomes, bound.ResistanceOhm).Ratio, states(outcomes))
	if count > 0 {
		r.Fail("%s: %d of %d fits lost", name, count, len(outcomes))
	}
	if unanswered > max(1, len(outcomes)/1000) {
		r.Fail("%s: %d of %d fits say that they cannot tell", name, unanswered, len(outcomes))
	}
	return nil
}
