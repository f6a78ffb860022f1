package accuracy

import (
	"context"
	"math"
	"math/rand/v2"
	"time"

	"example.com/admit/cmd/prove/accuracy/scipy"
	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// typicalCell is the sweep that times are taken on: the 25 MHz unit at 60 dB, 401 points, settled and stated to be so.
func typicalCell() (*cell, error) {
	p := scenario()[2]
	return newCell("typical", p, p.grid(-5, 5, 401), 60, sweep.S21, p.settledTiming())
}

// WholePath returns the least time of all that is done with one main sweep under a calibration of three standards with their uncertainties:
// terms and influences at its frequencies, starts, fit, gates, residual tests and covariances.
func WholePath(rng *rand.Rand, runs int) (time.Duration, error) {
	c, err := typicalCell()
	if err != nil {
		return 0, err
	}
	calibration := c.place.calibration(c.request.Sweep.FrequencyHz)
	calibration.Standards[0].CapacitanceUncertaintyFarad = 5e-15
	calibration.Standards[1].ResistanceUncertaintyOhm = 0.01
	calibration.Standards[2].ResistanceUncertaintyOhm = 0.02
	solved, err := network.Solve(calibration)
	if err != nil {
		return 0, err
	}
	b := c.newBench()
	var terms network.Terms
	b.request.Terms, b.request.NoiseRMS = &terms, c.rms
	least := time.Duration(math.MaxInt64)
	for range runs {
		b.draw(rng)
		began := time.Now()
		if err := solved.Terms(&terms, b.sweep.FrequencyHz, b.sweep.Quantity); err != nil {
			return 0, err
		}
		b.request.Contributions, err = solved.Contributions(b.request.Contributions, b.sweep.FrequencyHz, b.sweep.Quantity)
		if err != nil {
			return 0, err
		}
		b.fitter.Fit(&b.request, &b.estimate)
		least = min(least, time.Since(began))
		if b.estimate.State != resonance.Found {
			return 0, &unexpectedState{b.estimate.State, b.estimate.Detail}
		}
	}
	return least, nil
}

// unexpectedState is returned where a sweep that must be answered is not.
type unexpectedState struct {
	state  resonance.State
	detail string
}

func (e *unexpectedState) Error() string { return string(e.state) + ": " + e.detail }

// ScipySeconds returns the least time of one fit by scipy.optimize.least_squares with an analytic derivative and scipy's own tolerances, of the
// same kind of sweep, started a tenth of half the loaded width and some percent off.
func ScipySeconds(ctx context.Context, rng *rand.Rand, runs int) (time.Duration, error) {
	c, err := typicalCell()
	if err != nil {
		return 0, err
	}
	b := c.newBench()
	b.draw(rng)
	p := b.problem()
	p.DwellSeconds, p.Repeats = 0, runs
	p.Start.ResonanceHz = c.place.resonanceHz() + 0.05*c.place.loadedBandwidthHz()
	results, err := scipy.Fit(ctx, []scipy.Problem{p})
	if err != nil {
		return 0, err
	}
	return time.Duration(results[0].Seconds * 1e9), nil
}
