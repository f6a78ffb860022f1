package accuracy

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
	"example.com/admit/service/uncertainty"
)

// quantities are those that the proofs state, with the names of the columns.
var quantities = [...]struct {
	name string
	q    bound.Quantity
}{
	{"fs", bound.ResonanceHz}, {"R1", bound.ResistanceOhm}, {"C1", bound.CapacitanceFarad}, {"C0", bound.ShuntFarad}, {"Q", bound.QualityFactor},
}

// cell is one cell of a table: a unit measured again and again in one way.
type cell struct {
	name  string
	place place
	clean []complex128 // samples without noise, from the simulated fixture
	rms   float64      // complex noise of one sample
	limit *bound.Bound // nil where it is of no concern

	request resonance.Request // without samples
}

// newCell prepares sweeps of a unit over frequencies with noise that leaves the response snrDecibel above it. The terms come from standards
// read without noise in the same fixture.
func newCell(name string, p place, frequencyHz []float64, snrDecibel float64, q sweep.Quantity, t sweep.Timing) (*cell, error) {
	c := &cell{name: name, place: p, rms: p.response() * math.Pow(10, -snrDecibel/20)}
	c.clean = p.fixture.Stepped(p.unit, frequencyHz, t)
	solved, err := network.Solve(p.calibration(frequencyHz))
	if err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	terms := &network.Terms{}
	if err := solved.Terms(terms, frequencyHz, q); err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	c.request = resonance.Request{
		Sweep: &sweep.Sweep{Role: sweep.Main, Quantity: q, Timing: t, FrequencyHz: frequencyHz},
		Terms: terms,
	}
	c.limit, err = bound.Of(p.unit, c.swept())
	if err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	return c, nil
}

// swept describes the cell to the bound.
func (c *cell) swept() bound.Sweep {
	s := c.request.Sweep
	b := bound.Sweep{FrequencyHz: s.FrequencyHz, Port: c.place.port, NoiseRMS: c.rms, MagnitudeOnly: !s.Quantity.Complex()}
	if t := s.Timing; t.Dwell > 0 {
		b.Timing = &bound.Timing{Dwell: t.Dwell.Seconds(), Averaging: t.Averaging.Seconds(), LeadIn: t.LeadIn.Seconds()}
		if t.Averaging == 0 {
			b.Timing.Averaging = b.Timing.Dwell
		}
	}
	return b
}

// expected returns what a part type would lead the fit to expect of the unit: values some 20 % off.
func (c *cell) expected() resonance.Expected {
	m := c.place.unit.Modes[0]
	return resonance.Expected{
		ResonanceHz: m.ResonanceHz, ResistanceOhm: 1.25 * m.ResistanceOhm, InductanceHenry: 0.9 * m.InductanceHenry,
		ShuntCapacitanceFarad: 1.2 * c.place.unit.ShuntCapacitanceFarad,
	}
}

// bench is what one core needs to measure a cell: a fitter and buffers of its own.
type bench struct {
	cell     *cell
	fitter   resonance.Fitter
	estimate resonance.Estimate
	request  resonance.Request
	sweep    sweep.Sweep
	noise    []complex128
	widening float64 // of intervals where the noise is not stated
}

func (c *cell) newBench() *bench {
	b := &bench{cell: c, request: c.request, sweep: *c.request.Sweep}
	n := len(c.clean)
	b.sweep.Re, b.noise, b.widening = make([]float64, n), make([]complex128, n), wideningOf(n)
	if b.sweep.Quantity.Complex() {
		b.sweep.Im, b.widening = make([]float64, n), wideningOf(2*n)
	}
	b.request.Sweep = &b.sweep
	return b
}

// draw takes new noise and samples.
func (b *bench) draw(rng *rand.Rand) {
	part := b.cell.rms / math.Sqrt2
	for i, v := range b.cell.clean {
		b.noise[i] = complex(part*rng.NormFloat64(), part*rng.NormFloat64())
		b.put(i, v+b.noise[i])
	}
}

// put writes one sample.
func (b *bench) put(i int, v complex128) {
	if b.sweep.Im == nil {
		b.sweep.Re[i] = cmplx.Abs(v)
		return
	}
	b.sweep.Re[i], b.sweep.Im[i] = real(v), imag(v)
}

// outcome is what one trial says: of each quantity, and of the fit as a whole.
type outcome struct {
	readings [bound.Quantities]trial.Reading
	state    resonance.State
	estimate resonance.Estimate // without its slices
}

// fit fits the samples that were drawn. full says that the uncertainty is the whole one; otherwise it is that of the noise alone.
func (b *bench) fit(full bool) (o outcome) {
	b.fitter.Fit(&b.request, &b.estimate)
	e := &b.estimate
	o.state, o.estimate = e.State, *e
	o.estimate.Systematic = nil
	covariance := e.Statistical
	if full {
		covariance = e.Covariance()
	}
	truth := b.cell.place.unit
	main, got := truth.Modes[0], e.Unit()
	mode := got.Modes[0]
	c1, q := mode.CapacitanceFarad(), mode.QualityFactor()
	relative := 1 / mode.ResonanceHz
	widening := 1.0
	if b.request.NoiseRMS == 0 {
		widening = b.widening
	}
	for k, v := range [bound.Quantities]struct {
		got, want float64
		gradient  [4]float64 // by fs, ln R1, ln L1, C0
	}{
		bound.ResonanceHz:      {mode.ResonanceHz, main.ResonanceHz, [4]float64{1}},
		bound.ResistanceOhm:    {mode.ResistanceOhm, main.ResistanceOhm, [4]float64{0, mode.ResistanceOhm}},
		bound.InductanceHenry:  {mode.InductanceHenry, main.InductanceHenry, [4]float64{0, 0, mode.InductanceHenry}},
		bound.CapacitanceFarad: {c1, main.CapacitanceFarad(), [4]float64{-2 * relative * c1, 0, -c1}},
		bound.ShuntFarad:       {got.ShuntCapacitanceFarad, truth.ShuntCapacitanceFarad, [4]float64{0, 0, 0, 1}},
		bound.QualityFactor:    {q, main.QualityFactor(), [4]float64{relative * q, -q, q}},
	} {
		var variance float64
		for i, a := range v.gradient {
			for j, b := range v.gradient {
				variance += a * covariance[i][j] * b
			}
		}
		o.readings[k] = trial.Reading{Error: v.got - v.want, Deviation: widening * math.Sqrt(math.Max(variance, 0))}
	}
	if b.cell.limit != nil {
		for k, v := range b.cell.limit.Errors(b.noise) {
			o.readings[k].Efficient = v
		}
	}
	return o
}

// wideningOf returns by how much an interval is wider than that of a normal distribution because the noise was not stated and had to be had
// from n residuals: Student's distribution with as many degrees of freedom as the fit leaves.
func wideningOf(n int) float64 {
	const share, parameters = 0.975, 4
	return uncertainty.StudentQuantile(share, float64(n-parameters)) / uncertainty.NormalQuantile(share)
}

// measure runs the trials of a cell. arrange, if given, changes the request or the samples of one trial after they were drawn.
func (c *cell) measure(o Options, full bool, arrange func(b *bench, rng *rand.Rand)) []outcome {
	return trial.Repeat(o.Seed, c.name, o.Trials, func() func(*rand.Rand) outcome {
		b := c.newBench()
		return func(rng *rand.Rand) outcome {
			b.draw(rng)
			if arrange != nil {
				arrange(b, rng)
			}
			return b.fit(full)
		}
	})
}

// spread returns the spread of one quantity over the outcomes.
func (c *cell) spread(outcomes []outcome, q bound.Quantity) trial.Spread {
	readings := make([]trial.Reading, len(outcomes))
	for i, o := range outcomes {
		readings[i] = o.readings[q]
	}
	return trial.SpreadOf(readings, c.limit.Deviation[q])
}

// states counts the outcomes by state.
func states(outcomes []outcome) map[resonance.State]int {
	m := map[resonance.State]int{}
	for _, o := range outcomes {
		m[o.state]++
	}
	return m
}
