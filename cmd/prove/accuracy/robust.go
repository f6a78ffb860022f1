package accuracy

import (
	"fmt"
	"math"
	"time"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/service/crystal"
	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// odd is a unit or a window out of the ordinary.
type odd struct {
	name      string
	place     place
	low, high float64 // the window, in loaded bandwidths from fs
	points    int
	snr       float64
	outside   bool // the resonance is beyond the window
}

// qualityUnit is a 5 MHz unit of a given Q.
func qualityUnit(q float64) place {
	const hz, c1 = 5e6, 20e-15
	return place{fmt.Sprintf("5 MHz, Q %g", q), unitOf(hz, 1/(2*math.Pi*hz*c1*q), c1, 5e-12), network.PiNetwork, fixtureOf(network.PiNetwork)}
}

// odds lists the rows: windows at and beyond the edge, low figure of merit, Q from 500 to 3 million, 10 kHz to 200 MHz, 9 to 200 001 points.
func odds(o Options) []odd {
	var rows []odd
	add := func(name string, p place, low, high float64, points int, snr float64) {
		rows = append(rows, odd{name: name, place: p, low: low, high: high, points: points, snr: snr})
	}
	usual := scenario()[2]
	add("at the edge", usual, -10, 0, 401, 50)
	for _, beyond := range []float64{0.5, 1, 2} {
		rows = append(rows, odd{
			name: fmt.Sprintf("%g bandwidths beyond", beyond), place: usual, low: -10 - beyond, high: -beyond, points: 401, snr: 50, outside: true,
		})
	}
	add("M 1.7", place{"155.52 MHz, M 1.7", unitOf(155.52e6, 120, 0.2e-15, 5e-12), network.SeriesThrough, fixtureOf(network.SeriesThrough)}, -5, 5, 401, 50)
	add("M 0.8", place{"155.52 MHz, M 0.8", unitOf(155.52e6, 250, 0.2e-15, 5e-12), network.SeriesThrough, fixtureOf(network.SeriesThrough)}, -5, 5, 401, 50)
	qualities := []float64{500, 5e3, 5e4, 5e5, 3e6}
	if o.Short {
		qualities = []float64{500, 3e6}
	}
	for _, q := range qualities {
		add("", qualityUnit(q), -5, 5, 401, 60)
	}
	add("", place{"10 kHz", unitOf(10e3, 100e3, 3e-15, 1.5e-12), network.HighImpedance, fixtureOf(network.HighImpedance)}, -5, 5, 401, 60)
	add("", place{"200 MHz", unitOf(200e6, 60, 0.3e-15, 3.5e-12), network.SeriesThrough, fixtureOf(network.SeriesThrough)}, -5, 5, 401, 60)
	counts := []int{9, 21, 1601, 20001, 200001}
	if o.Short {
		counts = []int{9, 1601}
	}
	for _, n := range counts {
		span := 5.0
		if n < 50 {
			span = 2
		}
		add(fmt.Sprintf("%d points", n), usual, -span, span, n, 60)
	}
	return rows
}

// Robust measures units and windows out of the ordinary at the gates of Efficiency. The estimate of a resonance beyond the window, which the
// state says to be outside, stands under the same gates.
func Robust(o Options, r *trial.Report) error {
	t := newSpreadTable(r, fmt.Sprintf("Robustness: up to %d trials a cell", o.Trials), "unit", "window", "SNR dB", "trials")
	for _, row := range odds(o) {
		// As many samples in all as 2000 points a trial are.
		mine := o
		mine.Trials = max(min(o.Trials, 5), min(o.Trials, o.Trials*2000/row.points))
		p := row.place
		c, err := newCell(fmt.Sprintf("robustness, %s, %s", p.name, row.name), p, p.grid(row.low, row.high, row.points), row.snr, sweep.S21, sweep.Timing{})
		if err != nil {
			return err
		}
		outcomes := c.measure(mine, false, alternate)
		other := resonance.Found
		if row.outside { // up to half a bandwidth beyond, either will do
			other = resonance.OutsideSweep
		}
		t.row(c, outcomes, o.gate(), other, p.name, row.name, fmt.Sprint(row.snr), fmt.Sprint(mine.Trials))
	}
	t.Close()
	return neighbours(o, r)
}

// settledTiming is that of a sweep that waits twenty loaded time constants and averages over one more.
func (p *place) settledTiming() sweep.Timing {
	tau := time.Duration(p.timeConstantSeconds() * 1e9)
	return sweep.Timing{Dwell: 21 * tau, Averaging: tau, Phase: sweep.PhaseContinuous}
}

// neighboursShare is the share of the trials that a cell with a neighbour gets: those that fit nothing take long.
const neighboursShare = 5

// neighbours measures a unit with an unwanted mode two bandwidths away, fitted as one mode. It need not be answered; but what is answered must be
// right (answers). Modes that bias the fit by less than its noise are left out: nothing could tell them.
func neighbours(o Options, r *trial.Report) error {
	o.Trials = max(50, o.Trials/neighboursShare)
	t := r.Table(fmt.Sprintf("An unwanted mode two bandwidths away: 401 points over +-5 loaded bandwidths, 50 dB, %d trials a cell", o.Trials), "unit",
		"suppression dB", "fs off, bounds", "R1 off, bounds", "answered %", "wrong %", "states")
	defer t.Close()
	suppressions := []float64{3, 6, 10, 20, 30, 40}
	if o.Short {
		suppressions = []float64{6, 40}
	}
	var all answers
	for _, p := range []place{scenario()[2], scenario()[4]} {
		for _, suppression := range suppressions {
			c, err := newCell(fmt.Sprintf("neighbour, %s, %g dB", p.name, suppression), p.beside(suppression), p.grid(-5, 5, 401), 50, sweep.S21, p.settledTiming())
			if err != nil {
				return err
			}
			outcomes := c.measure(o, true, alternate)
			mine := answersOf(outcomes)
			all.add(mine)
			mine.check(r, c.name)
			t.Row(p.name, suppression, fmt.Sprintf("%+.1f", c.spread(outcomes, bound.ResonanceHz).Bias), fmt.Sprintf("%+.1f", c.spread(outcomes, bound.ResistanceOhm).Bias),
				fmt.Sprintf("%.1f", 100*mine.given/float64(len(outcomes))), mine.wrongPercent(), states(outcomes))
		}
	}
	all.checkAll(r, "neighbour")
	return nil
}

// beside returns the place with a second mode, two loaded bandwidths above the main one, of the same loaded width, and suppressed by so many
// decibels in transmission.
func (p *place) beside(suppressionDB float64) place {
	beside := *p
	main, termination := p.unit.Modes[0], p.terminationOhm()
	weaker := math.Pow(10, suppressionDB/20)
	beside.unit.Modes = []crystal.Mode{main, {
		ResonanceHz:     main.ResonanceHz + 2*p.loadedBandwidthHz(),
		ResistanceOhm:   (main.ResistanceOhm+termination)*weaker - termination,
		InductanceHenry: main.InductanceHenry * weaker,
	}}
	return beside
}
