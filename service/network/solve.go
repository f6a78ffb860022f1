package network

import (
	"errors"
	"fmt"
	"math"
	"slices"
)

// mostNodes bounds the nodes of a segment whose standards are all smooth: more would hold nothing new.
const mostNodes = 4097

// sampleFloor is the least standard deviation that a standard's sample is credited with, relative to the sample of a short, when standards are
// weighed and held against each other: linearity of the receiver and repeat of strays. Common practice, no source.
const sampleFloor = 1e-4

// Solve returns what the calibration knows: terms solved from its standards, or the nominal network where it has none.
//
// At each frequency the three terms follow from all standards whose sweeps reach there by least squares, each weighted with the noise of its
// readings and the uncertainty of its values; each standard is read between its own points after its mean delay was taken out, never
// beyond them. Before the result is given away the standards are held against each other, against the nominal network and against the check
// standards (see proof.go).
//
// Errors: every fault of Check, joined, when the calibration is not admissible; a *MismatchError when standards share no band or contradict
// each other. The Solved does not change any more and may be used by any number of goroutines; it does not keep the samples.
func Solve(c *Calibration) (*Solved, error) {
	if faults := c.Check(); len(faults) > 0 {
		errs := make([]error, len(faults))
		for i, f := range faults {
			errs[i] = f
		}
		return nil, fmt.Errorf("network: calibration %q: %w", c.ID, errors.Join(errs...))
	}
	s := newSolved(c)
	if len(c.Standards) == 0 {
		return s, nil
	}
	v := newSolver(c)
	if c.Standards[0].magnitudeOnly() {
		return s, v.solveMagnitudes(s)
	}
	return s, v.solve(s)
}

// solver is the state of one Solve.
type solver struct {
	calibration *Calibration
	scaleOhm    float64
	traces      []*trace // of the standards that are solved from
	checks      []*trace
	equations   equations
	readings    []reading // of one node, in the order of a segment's traces
	changed     []reading
}

func newSolver(c *Calibration) *solver {
	v := &solver{calibration: c, scaleOhm: c.scaleOhm()}
	noise := 0.0
	if c.ReceiverNoise != nil {
		noise = c.ReceiverNoise.RMS
	}
	for i := range c.Standards {
		t := newTrace(&c.Standards[i], noise)
		t.place = i + 1
		if t.standard.Kind == Check {
			v.checks = append(v.checks, t)
		} else {
			v.traces = append(v.traces, t)
		}
	}
	return v
}

func (v *solver) solve(s *Solved) error {
	s.influences = v.influences()
	for _, b := range v.bands() {
		g, err := v.segment(b, len(s.influences))
		if err != nil {
			return err
		}
		s.segments = append(s.segments, g)
	}
	if len(s.segments) == 0 {
		var each []string
		for _, t := range v.traces {
			each = append(each, fmt.Sprintf("%s %v", t.standard.describe(), t.band))
		}
		return mismatch("no band is covered by %d distinct standards: %s", needed, joined(each))
	}
	return v.prove(s)
}

// bands returns the spans in which the same standards, at least three distinct ones, were read: every border of a sweep is a border of a span,
// because with another set of standards the terms may jump.
func (v *solver) bands() []Band {
	var borders []float64
	for _, t := range v.traces {
		borders = append(borders, t.band.LowHz, t.band.HighHz)
	}
	slices.Sort(borders)
	borders = slices.Compact(borders)
	var bands []Band
	for i := 1; i < len(borders); i++ {
		b := Band{borders[i-1], borders[i]}
		var there []*Standard
		for _, t := range v.within(b) {
			there = append(there, t.standard)
		}
		if distinct(there, v.scaleOhm, (b.LowHz+b.HighHz)/2) >= needed {
			bands = append(bands, b)
		}
	}
	return bands
}

func (v *solver) within(b Band) []*trace {
	var there []*trace
	for _, t := range v.traces {
		if t.covers(b) {
			there = append(there, t)
		}
	}
	return there
}

// nodes returns the frequencies of a segment at which terms are solved: all at which one of its standards was read, and the ends.
func nodes(b Band, traces []*trace) []float64 {
	x := []float64{b.LowHz, b.HighHz}
	smooth := true
	for _, t := range traces {
		smooth = smooth && t.smooth != nil
		for _, f := range t.grid.x {
			if f > b.LowHz && f < b.HighHz {
				x = append(x, f)
			}
		}
	}
	slices.Sort(x)
	if smooth && len(x) > mostNodes {
		x = x[:mostNodes]
		for i := range x {
			x[i] = b.LowHz + (b.HighHz-b.LowHz)*float64(i)/(mostNodes-1)
		}
		return x
	}
	// Grids that differ by rounding only would leave nodes too close together to interpolate between.
	closest := 1e-6 * (b.HighHz - b.LowHz) / float64(len(x))
	kept := x[:1]
	for _, f := range x[1 : len(x)-1] {
		if f-kept[len(kept)-1] > closest && b.HighHz-f > closest {
			kept = append(kept, f)
		}
	}
	return append(kept, b.HighHz)
}

// segment solves the terms in one band.
func (v *solver) segment(b Band, influences int) (segment, error) {
	traces := v.within(b)
	g := segment{band: b, grid: newGrid(nodes(b, traces))}
	all := make([]three, len(g.grid.x))
	for i, f := range g.grid.x {
		v.read(traces, f)
		terms, ok := v.solveNode(traces, f)
		if !ok {
			return g, mismatch("the standards %s do not tell the three terms apart at %s", names(traces), frequency(f))
		}
		all[i] = terms
	}
	g.setTerms(all)
	v.setChanges(&g, traces, influences)
	return g, nil
}

// read takes the readings of the traces at a frequency.
func (v *solver) read(traces []*trace, f float64) {
	v.readings = v.readings[:0]
	for _, t := range traces {
		a, b := t.standard.ratio(f)
		v.readings = append(v.readings, reading{a, b, t.at(f), 1})
	}
}

// solveNode solves the readings. Three say it all. With more the weights depend on the terms, slowly, so two more rounds settle them.
func (v *solver) solveNode(traces []*trace, f float64) (three, bool) {
	terms, ok := v.equations.solve(v.readings, complex(v.scaleOhm, 0), v.scaleOhm)
	for round := 0; ok && round < 2 && len(v.readings) > needed; round++ {
		for i, t := range traces {
			v.readings[i].weight = 1 / v.deviation(t, f, terms)
		}
		terms, ok = v.equations.solve(v.readings, terms.c, v.scaleOhm)
	}
	return terms, ok
}

// deviation returns the standard deviation of a standard's sample against the terms: noise, stated values, repeat contact, and the floor.
func (v *solver) deviation(t *trace, f float64, terms three) float64 {
	a, b := t.standard.ratio(f)
	sample := terms.sample(a, b)
	variance := t.variance(f) + square(terms.b/terms.c)*sampleFloor*sampleFloor
	for _, value := range t.standard.uncertainValues() {
		moved := value.shifted(t.standard)
		a, b := moved.ratio(f)
		variance += square(terms.sample(a, b) - sample)
	}
	if contact := v.calibration.ContactUncertaintyOhm; contact > 0 {
		variance += square(terms.sample(a+complex(contact, 0)*b, b) - sample)
	}
	return math.Sqrt(variance)
}

func names(traces []*trace) string {
	var each []string
	for _, t := range traces {
		each = append(each, t.standard.describe())
	}
	return joined(each)
}
