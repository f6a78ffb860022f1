package accuracy

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
)

// drifting is what a station does between its calibration and the end of a sweep.
type drifting struct {
	name             string
	gainDB, phaseDeg float64 // standard deviations of what all samples of a sweep share
	flicker          float64 // rms of a complex 1/f drift, relative to the sample
}

// stated returns the standard uncertainties that the calibration states: all of the drift, with the part of the 1/f drift along the sample as
// gain and that across it as phase.
func (d drifting) stated() (gainDB, phaseDeg float64) {
	part := d.flicker / math.Sqrt2
	return math.Hypot(d.gainDB, part*20/math.Ln10), math.Hypot(d.phaseDeg, part*180/math.Pi)
}

// drifts lists the rows of the table. The first is gated; the others show its parts.
func drifts() []drifting {
	return []drifting{
		{"gain 0.01 dB, phase 0.1 degree, 1/f 0.1 %", 0.01, 0.1, 1e-3},
		{"gain 0.01 dB, phase 0.1 degree", 0.01, 0.1, 0},
		{"1/f 0.1 %", 0, 0, 1e-3},
	}
}

// Drift measures sweeps that drift, the drift drawn anew for each: the full 95 % interval, statistical and systematic, must cover the truth in
// at least 95 % of the trials of the first row, and its median half-width may be no more than 1.5 times 1.96 times the actual rms error.
func Drift(o Options, r *trial.Report) error {
	t := r.Table(fmt.Sprintf("Drift: 60 dB, 401 points over +-5 loaded bandwidths, settled, %d trials a cell; the full 95 %% interval", o.Trials), append(
		[]string{"unit", "drift"}, func() (c []string) {
			for _, q := range quantities {
				c = append(c, q.name+" covers %", "half-width/(1.96 rms)")
			}
			return append(c, "lag-1", "states")
		}()...)...)
	defer t.Close()
	for _, p := range o.places() {
		for _, d := range drifts() {
			if err := d.measure(o, r, t, p); err != nil {
				return err
			}
		}
	}
	return nil
}

func (d drifting) measure(o Options, r *trial.Report, t *trial.Table, p place) error {
	c, err := newCell(fmt.Sprintf("drift, %s, %s", p.name, d.name), p, p.grid(-5, 5, 401), 60, sweep.S21, sweep.Timing{})
	if err != nil {
		return err
	}
	calibration := p.calibration(c.request.Sweep.FrequencyHz)
	calibration.DriftGainDB, calibration.DriftPhaseDeg = d.stated()
	solved, err := network.Solve(calibration)
	if err != nil {
		return err
	}
	if c.request.Contributions, err = solved.Contributions(nil, c.request.Sweep.FrequencyHz, sweep.S21); err != nil {
		return err
	}
	outcomes := c.measure(o, true, func(b *bench, rng *rand.Rand) {
		alternate(b, rng)
		d.apply(b, rng)
	})
	cells := []any{p.name, d.name}
	for _, q := range quantities {
		s := c.spread(outcomes, q.q)
		width := s.MedianHalf95 / (1.96 * s.RootMeanSquare)
		cells = append(cells, fmt.Sprintf("%.1f", 100*s.PlainCoverage), fmt.Sprintf("%.2f", width))
		if d.name != drifts()[0].name {
			continue
		}
		if s.PlainCoverage < 0.95 {
			r.Fail("%s, %s: the full interval covers %.1f %%, want 95 %%", c.name, q.name, 100*s.PlainCoverage)
		}
		if width > 1.5 {
			r.Fail("%s, %s: the median half-width is %.2f times 1.96 rms errors, want at most 1.5", c.name, q.name, width)
		}
	}
	var lag []float64
	for _, out := range outcomes {
		lag = append(lag, out.estimate.Quality.ResidualCorrelation)
	}
	t.Row(append(cells, trial.Quantile(lag, 0.5), states(outcomes))...)
	return nil
}

// apply lets the samples of a bench drift.
func (d drifting) apply(b *bench, rng *rand.Rand) {
	all := cmplx.Rect(math.Pow(10, d.gainDB*rng.NormFloat64()/20), d.phaseDeg*math.Pi/180*rng.NormFloat64())
	wander := newFlicker(d.flicker, len(b.noise))
	for i, v := range b.cell.clean {
		b.put(i, v*all*(1+wander.next(rng))+b.noise[i])
	}
}

// Named checks that drift of a size that matters is seen and given its name: a turn of one degree as a free phase, within three of its standard
// uncertainties, and a 1/f drift of one percent as correlation of the residuals.
func Named(o Options, r *trial.Report) error {
	o.Trials = max(50, o.Trials/5)
	t := r.Table(fmt.Sprintf("Drift that is named: 60 dB, %d trials a cell", o.Trials), "unit", "drift", "mean free phase, degrees", "within 3 u %", "lag-1 correlation above 0.1, %", "states")
	defer t.Close()
	for _, p := range o.places() {
		for _, d := range []struct {
			drifting
			turnDeg float64
		}{{drifting{name: "turn of 1 degree"}, 1}, {drifting{name: "1/f 1 %", flicker: 0.01}, 0}} {
			c, err := newCell(fmt.Sprintf("named drift, %s, %s", p.name, d.name), p, p.grid(-5, 5, 401), 60, sweep.S21, sweep.Timing{})
			if err != nil {
				return err
			}
			outcomes := c.measure(o, true, func(b *bench, rng *rand.Rand) {
				d.apply(b, rng)
				turn := cmplx.Rect(1, d.turnDeg*math.Pi/180)
				for i := range b.noise {
					b.put(i, turn*complex(b.sweep.Re[i], b.sweep.Im[i]))
				}
			})
			var mean, within, correlated float64
			n := float64(len(outcomes))
			for _, out := range outcomes {
				q := out.estimate.Quality
				degrees, sigma := q.FreePhaseRad*180/math.Pi, q.FreePhaseSigma*180/math.Pi
				mean += degrees / n
				if math.Abs(degrees-d.turnDeg) <= 3*sigma {
					within++
				}
				if q.ResidualCorrelation > 0.1 {
					correlated++
				}
			}
			t.Row(p.name, d.name, mean, fmt.Sprintf("%.1f", 100*within/n), fmt.Sprintf("%.1f", 100*correlated/n), states(outcomes))
			if d.turnDeg != 0 && within < 0.97*n {
				r.Fail("%s: the free phase is within three standard uncertainties in %.1f %%, want 97 %%", c.name, 100*within/n)
			}
			if d.flicker != 0 && correlated < 0.95*n {
				r.Fail("%s: the lag-1 correlation is above 0.1 in %.1f %%, want 95 %%", c.name, 100*correlated/n)
			}
		}
	}
	return nil
}

// flicker is a complex random walk of spectrum 1/f: the sum of first-order processes whose times, in samples, lie an octave apart from one
// sample to four sweeps.
type flicker struct {
	rms   float64 // of one process, a part
	keep  []float64
	state []complex128
	begun bool
}

func newFlicker(rms float64, samples int) *flicker {
	f := &flicker{}
	for time := 1.0; time <= 4*float64(samples); time *= 2 {
		f.keep = append(f.keep, math.Exp(-1/time))
	}
	f.state = make([]complex128, len(f.keep))
	f.rms = rms / math.Sqrt(2*float64(len(f.keep)))
	return f
}

// next returns the drift of the next sample.
func (f *flicker) next(rng *rand.Rand) (sum complex128) {
	if f.rms == 0 {
		return 0
	}
	for k, keep := range f.keep {
		fresh := math.Sqrt(1 - keep*keep)
		if !f.begun {
			keep, fresh = 0, 1
		}
		f.state[k] = complex(keep, 0)*f.state[k] + complex(f.rms*fresh, 0)*complex(rng.NormFloat64(), rng.NormFloat64())
		sum += f.state[k]
	}
	f.begun = true
	return sum
}
