package accuracy

import (
	"fmt"
	"math"
	"testing"

	"example.com/admit/service/sweep"
)

func TestZZ(t *testing.T) {
	for _, p := range scenario() {
		snr, wild := 5.0, 0.0
		c, err := newCell(fmt.Sprintf("lost fits, %s, %g dB, wild %g", p.name, snr, wild), p, p.grid(-5, 5, 401), snr, sweep.S21, sweep.Timing{})
		if err != nil {
			t.Fatal(err)
		}
		for _, s := range []uint64{13410680172056607566, 1, 2} {
			for i, o := range c.measure(Options{Trials: 10000, Seed: s}, false, alternate) {
				if o.state != "found" || math.Abs(o.readings[0].Error) > 0.5*p.loadedBandwidthHz() {
					fmt.Println(p.name, s, i, o.state, o.estimate.Detail, o.readings[0], c.limit.Deviation[0], o.estimate.Fitted, fmt.Sprintf("%+v", o.estimate.Quality))
				}
			}
		}
	}
}
