package accuracy

import (
	"fmt"
	"math"
	"math/rand/v2"
	"time"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// unstatedShare is the share of the trials that a cell of this table gets: it has many cells, and is gated on what they say together.
const unstatedShare = 50

// Unstated measures fast sweeps of which no timing is stated: how many are answered, and whether what is answered is right. The gate, for
// all cells of a kind together: at least 95 % answered, and in 99 % of the answers |Q - true| <= 3 u(Q), and the same for fs. The
// kinds: network known or not (then fs and Q are those of the unit as the network loads it), and the whole dwell averaged or the half of it.
func Unstated(o Options, r *trial.Report) error {
	o.Trials = max(10, o.Trials/unstatedShare)
	t := r.Table(fmt.Sprintf("Timing not stated: 401 points over +-5 loaded bandwidths, %d trials a cell", o.Trials), "network", "averaged", "unit", "dwell/tau",
		"SNR dB", "answered %", "|dQ| <= 3 u(Q) %", "|dfs| <= 3 u(fs) %", "median u(Q)/Q %", "mean dfs/step", "states")
	defer t.Close()
	for _, unknown := range []bool{false, true} {
		for _, averaged := range []float64{1, 0.5} {
			var all tally
			for _, p := range o.places() {
				for _, dwell := range o.unstatedDwells() {
					for _, snr := range []float64{60, 80} {
						u := unstated{unknown, p, dwell, averaged, snr}
						if err := u.measure(o, t, &all); err != nil {
							return err
						}
					}
				}
			}
			all.check(r, fmt.Sprintf("unstated timing, network %s, %g of the dwell averaged", known(unknown), averaged))
		}
	}
	return nil
}

func (o Options) unstatedDwells() []float64 {
	if o.Short {
		return []float64{0.2, 2}
	}
	return []float64{0.1, 0.2, 0.5, 1, 2}
}

func known(unknown bool) string {
	if unknown {
		return "unknown"
	}
	return "known"
}

// tally counts sweeps, those answered, and the answers within three standard uncertainties.
type tally struct{ all, answered, q, hz float64 }

func (t *tally) check(r *trial.Report, name string) {
	if t.answered < 0.95*t.all {
		r.Fail("%s: %.1f %% answered, want 95 %%", name, 100*t.answered/t.all)
	}
	if !(t.q >= 0.99*t.answered) {
		r.Fail("%s: Q within 3 u(Q) in %.1f %% of the answers, want 99 %%", name, 100*t.q/t.answered)
	}
	if !(t.hz >= 0.99*t.answered) {
		r.Fail("%s: fs within 3 u(fs) in %.1f %% of the answers, want 99 %%", name, 100*t.hz/t.answered)
	}
}

type unstated struct {
	scaleUnknown         bool
	place                place
	dwell, averaged, snr float64
}

func (u *unstated) measure(o Options, t *trial.Table, all *tally) error {
	p := u.place
	dwell := time.Duration(u.dwell * p.timeConstantSeconds() * 1e9)
	timing := sweep.Timing{Dwell: dwell, Averaging: time.Duration(u.averaged * float64(dwell)), Phase: sweep.PhaseContinuous}
	name := fmt.Sprintf("unstated timing, network %s, %s, dwell %g tau, averaged %g, %g dB", known(u.scaleUnknown), p.name, u.dwell, u.averaged, u.snr)
	c, err := newCell(name, p, p.grid(-5, 5, 401), u.snr, sweep.S21, timing)
	if err != nil {
		return err
	}
	outcomes := c.measure(o, true, func(b *bench, _ *rand.Rand) {
		b.sweep.Timing = sweep.Timing{}
		b.request.ScaleUnknown = u.scaleUnknown
	})
	moveQ, moveHz := 0.0, 0.0 // from the unit to the unit as the network loads it
	if u.scaleUnknown {
		moveQ, moveHz = c.loadedQ()-p.unit.Modes[0].QualityFactor(), c.loadedOffsetHz()
	}
	mine := tally{all: float64(len(outcomes))}
	var relative []float64
	var mean float64
	for _, out := range outcomes {
		if out.state != resonance.Found {
			continue
		}
		mine.answered++
		q, f := out.readings[bound.QualityFactor], out.readings[bound.ResonanceHz]
		if math.Abs(q.Error-moveQ) <= 3*q.Deviation {
			mine.q++
		}
		if math.Abs(f.Error-moveHz) <= 3*f.Deviation {
			mine.hz++
		}
		mean += (f.Error - moveHz) / (p.loadedBandwidthHz() * 10 / 400)
		relative = append(relative, 100*q.Deviation/(p.unit.Modes[0].QualityFactor()+moveQ))
	}
	t.Row(known(u.scaleUnknown), u.averaged, p.name, u.dwell, u.snr, fmt.Sprintf("%.1f", 100*mine.answered/mine.all), fmt.Sprintf("%.1f", 100*mine.q/mine.answered),
		fmt.Sprintf("%.1f", 100*mine.hz/mine.answered), trial.Quantile(relative, 0.5), fmt.Sprintf("%+.4f", mean/mine.answered), states(outcomes))
	all.all += mine.all
	all.answered += mine.answered
	all.q += mine.q
	all.hz += mine.hz
	return nil
}

// loadedOffsetHz and loadedQ are those of the pole that the network makes of the unit: Z1 + Zp = 0 with Zp the network across C0.
func (c *cell) loadedOffsetHz() float64 {
	m := c.place.unit.Modes[0]
	return -imag(c.seen()) / (4 * math.Pi * m.InductanceHenry)
}

func (c *cell) loadedQ() float64 {
	return c.place.unit.Modes[0].LoadedQualityFactor(real(c.seen()))
}

func (c *cell) seen() complex128 {
	f := c.place.resonanceHz()
	source := c.place.port(f).Source
	return source / (1 + source*c.place.unit.ShuntAdmittance(f))
}
