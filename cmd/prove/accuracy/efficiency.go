package accuracy

import (
	"fmt"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// Efficiency measures the five units of the scenario in their networks, 401 points over +-5 loaded bandwidths, settled, at signal-to-noise
// ratios from 30 to 80 dB, complex and magnitude-only: standard deviation over the bound, bias and coverage of the statistical interval.
// Every other trial states the receiver's noise, so that both ways of finding it are in the figures.
func Efficiency(o Options, r *trial.Report) error {
	for _, q := range []sweep.Quantity{sweep.S21, sweep.S21Magnitude} {
		t := newSpreadTable(r, fmt.Sprintf("Efficiency, %s: 401 points over +-5 loaded bandwidths, %d trials a cell", q, o.Trials), "unit", "SNR dB")
		for _, p := range o.places() {
			for _, snr := range o.snr() {
				c, err := newCell(fmt.Sprintf("efficiency %s %s %g", q, p.name, snr), p, p.grid(-5, 5, 401), snr, q, sweep.Timing{})
				if err != nil {
					return err
				}
				outcomes := c.measure(o, false, alternate)
				t.row(c, outcomes, o.gate(), resonance.Found, p.name, fmt.Sprintf("%g", snr))
			}
		}
		t.Close()
	}
	return nil
}

func (o Options) snr() []float64 {
	if o.Short {
		return []float64{30, 60, 80}
	}
	return []float64{30, 40, 50, 60, 70, 80}
}
