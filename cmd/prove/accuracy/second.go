package accuracy

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"

	"example.com/admit/cmd/prove/accuracy/scipy"
	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/service/sweep"
)

// SecondOpinion has scipy.optimize.least_squares fit the same samples, with a model of its own, settled and ringing: the estimates must agree
// within 0.05 standard deviations. It returns scipy.ErrMissing where that is not installed.
func SecondOpinion(o Options, r *trial.Report) error {
	sweeps := max(3, o.Trials/100)
	var asked []*question
	for _, p := range o.places() {
		for _, row := range []fastRow{{note: "settled", points: 401}, {points: 401, dwell: 0.5, averaging: 0.5, leadIn: 0.3}, {points: 401, dwell: 0.2, averaging: 1}} {
			for _, snr := range []float64{40, 60} {
				c, err := row.secondOpinion(p, snr)
				if err != nil {
					return err
				}
				asked = append(asked, c.ask(o, sweeps))
			}
		}
	}
	var problems []scipy.Problem // all in one, python takes its time to start
	for _, q := range asked {
		problems = append(problems, q.problems...)
	}
	results, err := scipy.Fit(context.Background(), problems)
	if err != nil {
		return err
	}
	t := r.Table(fmt.Sprintf("scipy.optimize.least_squares on the same samples: largest difference of %d sweeps, in standard deviations", sweeps),
		"sweep", "fs", "R1", "L1", "C0")
	defer t.Close()
	for _, q := range asked {
		q.compare(r, t, results[:sweeps])
		results = results[sweeps:]
	}
	return nil
}

// question is some sweeps of a cell with the fit's own answers.
type question struct {
	cell     *cell
	problems []scipy.Problem
	own      []outcome
}

// secondOpinion prepares the cell of a row.
func (f fastRow) secondOpinion(p place, snr float64) (*cell, error) {
	timing := sweep.Timing{}
	if f.dwell > 0 {
		timing = f.timing(&p)
	}
	return newCell(fmt.Sprintf("scipy, %s, %s, %g dB", p.name, f, snr), p, p.grid(-5, 5, f.points), snr, sweep.S21, timing)
}

// problem hands the samples of a bench to scipy, to be started a little off the truth.
func (b *bench) problem() scipy.Problem {
	c := b.cell
	main := c.place.unit.Modes[0]
	port := c.place.port(main.ResonanceHz)
	pair := func(v complex128) [2]float64 { return [2]float64{real(v), imag(v)} }
	p := scipy.Problem{
		FrequencyHz: b.sweep.FrequencyHz, Re: append([]float64(nil), b.sweep.Re...), Im: append([]float64(nil), b.sweep.Im...),
		Open: pair(port.Open), Gain: pair(port.Gain), Source: pair(port.Source), NoiseRMS: c.rms, BandwidthHz: c.place.loadedBandwidthHz(),
		Start: scipy.Circuit{
			ResonanceHz: main.ResonanceHz + 0.01*c.place.loadedBandwidthHz(), ResistanceOhm: 1.02 * main.ResistanceOhm,
			InductanceHenry: 0.98 * main.InductanceHenry, ShuntFarad: 1.05 * c.place.unit.ShuntCapacitanceFarad,
		},
	}
	if t := c.swept().Timing; t != nil {
		p.DwellSeconds, p.Averaging, p.LeadIn = t.Dwell, t.Averaging, t.LeadIn
	}
	return p
}

// ask draws sweeps and fits them.
func (c *cell) ask(o Options, sweeps int) *question {
	q := &question{cell: c}
	b := c.newBench()
	for i := range sweeps {
		b.draw(rand.New(rand.NewPCG(o.Seed, uint64(i))))
		q.own = append(q.own, b.fit(false))
		p := b.problem()
		p.Tolerance = 1e-12
		q.problems = append(q.problems, p)
	}
	return q
}

// compare holds the fit's answers against scipy's.
func (q *question) compare(r *trial.Report, t *trial.Table, results []scipy.Result) {
	const most = 0.05
	c := q.cell
	main, deviation := c.place.unit.Modes[0], c.limit.Deviation
	var largest [4]float64
	for i, s := range results {
		own, start := q.own[i].readings, q.problems[i].Start
		for k, d := range [4]float64{
			(own[bound.ResonanceHz].Error - (start.ResonanceHz - main.ResonanceHz) - s.OffsetHz) / deviation[bound.ResonanceHz],
			(own[bound.ResistanceOhm].Error - (s.ResistanceOhm - main.ResistanceOhm)) / deviation[bound.ResistanceOhm],
			(own[bound.InductanceHenry].Error - (s.InductanceHenry - main.InductanceHenry)) / deviation[bound.InductanceHenry],
			(own[bound.ShuntFarad].Error - (s.ShuntFarad - c.place.unit.ShuntCapacitanceFarad)) / deviation[bound.ShuntFarad],
		} {
			largest[k] = math.Max(largest[k], math.Abs(d))
		}
	}
	t.Row(c.name, largest[0], largest[1], largest[2], largest[3])
	for k, name := range []string{"fs", "R1", "L1", "C0"} {
		if !(largest[k] <= most) {
			r.Fail("%s: %s differs from scipy's by %.3f standard deviations, want at most %g", c.name, name, largest[k], most)
		}
	}
}
