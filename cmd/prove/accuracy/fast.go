package accuracy

import (
	"fmt"
	"slices"
	"time"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// fastRow is one way of sweeping faster than the resonator settles, in loaded time constants and bandwidths.
type fastRow struct {
	note      string
	points    int
	dwell     float64
	averaging float64 // share of the dwell
	leadIn    float64
	down      bool
	glide     bool // the source does not step but moves on all the time, from half a step before a frequency to half a step after it
}

// fastRows returns the rows of the table: every sweep lasts at least eight time constants.
func (o Options) fastRows() []fastRow {
	var rows []fastRow
	dwells := []float64{10, 5, 2, 1, 0.5, 0.2, 0.1, 0.05}
	if o.Short {
		dwells = []float64{10, 0.5, 0.05}
	}
	for _, d := range dwells {
		rows = append(rows, fastRow{points: 401, dwell: d, averaging: 1})
	}
	return append(rows,
		fastRow{note: "tail half averaged", points: 401, dwell: 0.2, averaging: 0.5},
		fastRow{note: "lead-in 0.7", points: 401, dwell: 0.1, averaging: 0.5, leadIn: 0.7},
		fastRow{note: "downwards", points: 401, dwell: 0.2, averaging: 0.5, down: true},
		fastRow{note: "gliding", points: 401, dwell: 0.2, averaging: 1, glide: true},
		fastRow{note: "gliding", points: 401, dwell: 0.05, averaging: 1, glide: true},
		fastRow{note: "eight time constants in all", points: 161, dwell: 0.05, averaging: 1},
		fastRow{note: "eight time constants in all", points: 41, dwell: 0.2, averaging: 1},
	)
}

// String names the row within a table.
func (f fastRow) String() string {
	return fmt.Sprintf("%g x %d %s", f.dwell, f.points, f.note)
}

// timing returns the times of a row for a unit, to the nanosecond in which they are stated and kept.
func (f fastRow) timing(p *place) sweep.Timing {
	tau := p.timeConstantSeconds() * 1e9
	dwell := time.Duration(f.dwell * tau)
	return sweep.Timing{
		Dwell: dwell, Averaging: time.Duration(f.averaging * float64(dwell)), LeadIn: time.Duration(f.leadIn * tau), Phase: sweep.PhaseContinuous,
	}
}

// cell prepares a row over +-5 loaded bandwidths.
func (f fastRow) cell(p place, snr float64) (*cell, error) {
	frequencies := p.grid(-5, 5, f.points)
	if f.down {
		slices.Reverse(frequencies)
	}
	c, err := newCell(fmt.Sprintf("fast %s %s %g dB", p.name, f, snr), p, frequencies, snr, sweep.S21, f.timing(&p))
	if err == nil && f.glide {
		c.glide()
	}
	return c, err
}

// glide replaces the samples by those of a source that moves at a constant rate: forty small steps for each, their mean the sample.
func (c *cell) glide() {
	const fine = 40
	s := c.request.Sweep
	s.Timing.Dwell -= s.Timing.Dwell % fine // whole nanoseconds a small step
	s.Timing.Averaging = s.Timing.Dwell
	step := s.FrequencyHz[1] - s.FrequencyHz[0]
	small := make([]float64, 0, fine*len(s.FrequencyHz))
	for _, f := range s.FrequencyHz {
		for k := range fine {
			small = append(small, f+step*((float64(k)+0.5)/fine-0.5))
		}
	}
	samples := c.place.fixture.Stepped(c.place.unit, small, sweep.Timing{Dwell: s.Timing.Dwell / fine, Phase: sweep.PhaseContinuous})
	for i := range c.clean {
		c.clean[i] = 0
		for _, v := range samples[i*fine : (i+1)*fine] {
			c.clean[i] += v / fine
		}
	}
}

// Fast measures sweeps that outrun the resonator, with dwell and averaging stated and a source of continuous phase: the gates of Efficiency,
// what a fit without memory would be off by, and the time saved.
func Fast(o Options, r *trial.Report) error {
	for _, snr := range []float64{60, 40, 80} {
		rows := o.fastRows()
		if snr != 60 {
			rows = slices.DeleteFunc(rows, func(f fastRow) bool { return f.note != "" || !o.Full && f.dwell != 0.5 && f.dwell != 0.05 })
		}
		t := newSpreadTable(r, fmt.Sprintf("Fast sweeps: %g dB a sample, +-5 loaded bandwidths, %d trials a cell", snr, o.Trials), "unit", "dwell/tau x points")
		for _, p := range o.places() {
			for _, f := range rows {
				c, err := f.cell(p, snr)
				if err != nil {
					return err
				}
				t.row(c, c.measure(o, false, alternate), o.gate(), resonance.Found, p.name, f.String())
			}
		}
		t.Close()
	}
	return timeSaved(o, r)
}

// timeSaved prints, for each fast sweep, what a fit without memory makes of it, and how much longer settled sweeps take for the same
// uncertainty of fs, R1 and C1: on the same grid after seven time constants, the fastest settled design there is, and 401 points at seven
// time constants. The receiver is the one that gives a sample of the fast sweep 60 dB.
func timeSaved(o Options, r *trial.Report) error {
	t := r.Table("Fast sweeps without memory in the model, and the time saved by it at equal uncertainty", "unit", "dwell/tau x points", "sweep/tau",
		"plain fs ppm", "plain R1 %", "same grid settled", "best settled", "its design", "401 points at 7 tau")
	for _, p := range o.places() {
		s, err := newSettled(p)
		if err != nil {
			return err
		}
		tau := p.timeConstantSeconds()
		for _, f := range o.fastRows() {
			c, err := f.cell(p, 60)
			if err != nil {
				return err
			}
			timing := c.swept().Timing
			took := float64(f.points)*timing.Dwell + timing.LeadIn
			if took < 7.99*tau {
				r.Fail("%s: the sweep lasts %.2f time constants, not eight", c.name, took/tau)
			}
			ppm, percent := c.plainBias()
			heard := receiver{c.rms, timing.Averaging}
			same, err := bound.Of(p.unit, bound.Sweep{FrequencyHz: c.request.Sweep.FrequencyHz, Port: p.port, NoiseRMS: 1})
			if err != nil {
				return err
			}
			wanted := c.limit.Deviation
			best, chosen := s.bestSeconds(heard, wanted)
			t.Row(p.name, f.String(), took/tau, ppm, percent,
				times(s.seconds(design{points: f.points, deviation: same.Deviation}, heard, wanted)/took),
				times(best/took), fmt.Sprintf("%d over +-%g", chosen.points, chosen.half), times(s.seconds(s.habit(), heard, wanted)/took))
		}
	}
	t.Close()
	return nil
}

func times(ratio float64) string { return fmt.Sprintf("x%.1f", ratio) }

// plainBias returns by how much a fit that takes the samples for settled is off, without noise: fs in ppm and R1 in percent.
func (c *cell) plainBias() (ppm, percent float64) {
	b := c.newBench()
	for i, v := range c.clean {
		b.put(i, v)
	}
	b.sweep.Timing = sweep.Timing{Phase: sweep.PhaseRestarted} // nothing to make a memory of
	o := b.fit(false)
	m := c.place.unit.Modes[0]
	return 1e6 * o.readings[bound.ResonanceHz].Error / m.ResonanceHz, 100 * o.readings[bound.ResistanceOhm].Error / m.ResistanceOhm
}
