package network

import (
	"math"

	"example.com/admit/service/sweep"
)

// Solved is a calibration put to use: it gives the terms and their uncertain influences at the frequencies of any sweep, whether they come
// from standards or from the nominal network. Immutable and safe for concurrent use.
type Solved struct {
	network               Kind
	referenceImpedanceOhm float64
	terminationOhm        float64
	drift                 drift

	magnitudeOnly bool
	segments      []segment // in ascending order; empty: the nominal network
	influences    []influence
	readings      []CheckReading
}

func newSolved(c *Calibration) *Solved {
	return &Solved{
		network:               c.Network,
		referenceImpedanceOhm: c.referenceImpedanceOhm(),
		terminationOhm:        c.terminationOhm(),
		drift:                 drift{gainDB: c.DriftGainDB, phaseDeg: c.DriftPhaseDeg},
	}
}

// segment holds the terms of one band, solved at the nodes of a grid. A and B have the mean delay of B taken out, so that they change slowly
// from node to node.
type segment struct {
	band        Band
	grid        grid
	delaySecond float64
	a, b, c     []complex128

	// What the influences change, at few nodes of their own: an uncertainty needs no fourth digit. Index: influence; nil: no change here.
	coarse  grid
	changes [][]three
	noise   []*trace // of a noise influence, which changes is per unit of the sample: whose noise it is
}

func (g *segment) setTerms(all []three) {
	n := len(all)
	g.a, g.b, g.c = make([]complex128, n), make([]complex128, n), make([]complex128, n)
	for i, m := range all {
		g.a[i], g.b[i], g.c[i] = m.a, m.b, m.c
	}
	g.delaySecond = meanDelay(g.grid.x, g.b)
	for i, f := range g.grid.x {
		back := turn(-g.delaySecond, f, g.band.LowHz)
		g.a[i] *= back
		g.b[i] *= back
	}
}

// at returns the terms at a frequency inside the band; hint is the cell to look in first, and the cell found is returned.
func (g *segment) at(f float64, hint int) (three, int) {
	cell := g.grid.cell(f, hint)
	first, w := g.grid.weights(f, cell)
	forth := turn(g.delaySecond, f, g.band.LowHz)
	return three{g.grid.apply(g.a, first, &w) * forth, g.grid.apply(g.b, first, &w) * forth, g.grid.apply(g.c, first, &w)}, cell
}

// Calibrated reports whether the terms come from standards; false means the nominal network.
func (s *Solved) Calibrated() bool { return len(s.segments) > 0 }

// Network returns the kind of the fixture network.
func (s *Solved) Network() Kind { return s.network }

// Bands returns the spans that the standards cover, in ascending order and joined where they touch; nil for a nominal network, which
// knows no band.
func (s *Solved) Bands() []Band {
	var bands []Band
	for i := range s.segments {
		b := s.segments[i].band
		if n := len(bands); n > 0 && bands[n-1].HighHz == b.LowHz {
			bands[n-1].HighHz = b.HighHz
			continue
		}
		bands = append(bands, b)
	}
	return bands
}

// CheckReadings returns how each check standard read, where it read worst: all within their expanded uncertainties, or Solve had failed.
func (s *Solved) CheckReadings() []CheckReading { return append([]CheckReading(nil), s.readings...) }

// Terms writes the terms at the frequencies of a sweep, in its order, into dst, whose buffers are reused: nothing is allocated from the second
// call of a length on. Accuracy: exact to rounding where standards were read, and between these as exact as the cubic through the four
// nearest readings of their delay-free samples.
//
// Samples that are admittances or impedances are the unit's own, whatever the network. For s21-magnitude the modulus of the terms' sample
// is meant.
//
// Errors: *UnsupportedError for a quantity that the network cannot give; ErrUnknownNetwork without standards; *MismatchError for a
// frequency outside the calibrated bands (nothing is extrapolated), or when phases are asked of standards read as magnitudes.
func (s *Solved) Terms(dst *Terms, frequencyHz []float64, q sweep.Quantity) error {
	if !s.network.Gives(q) {
		return &UnsupportedError{s.network, q}
	}
	if stated, ok := statedTerms(q); ok {
		dst.setFrequencies(frequencyHz)
		dst.setConstant(stated)
		return nil
	}
	if !s.Calibrated() {
		nominal, err := nominalTerms(s.network, s.referenceImpedanceOhm, s.terminationOhm)
		if err != nil {
			return err
		}
		dst.setFrequencies(frequencyHz)
		dst.setConstant(nominal)
		return nil
	}
	if s.magnitudeOnly && q.Complex() {
		return mismatch("the standards were read as magnitudes, the sweep is %s and needs their phases", q)
	}
	dst.setFrequencies(frequencyHz)
	dst.D = 1
	which, cell := 0, 0
	for i, f := range frequencyHz {
		inside, next := s.locate(f, which)
		if next < 0 {
			return s.outside(frequencyHz)
		}
		var m three
		m, cell = s.segments[next].at(inside, cell)
		which = next
		dst.A[i], dst.B[i], dst.C[i] = m.a, m.b, m.c
	}
	return nil
}

// edge is how far outside a band a frequency may lie to be taken as its end, relative: files print frequencies with rounding.
const edge = 1e-9

// locate returns the segment that holds a frequency, -1 for none, and the frequency, moved onto the edge where it is within rounding of it.
// which is where to look first.
func (s *Solved) locate(f float64, which int) (inside float64, segment int) {
	if b := &s.segments[which].band; b.LowHz <= f && f <= b.HighHz {
		return f, which
	}
	for _, slack := range [...]float64{0, edge * f} {
		for i := range s.segments {
			if b := &s.segments[i].band; b.LowHz-slack <= f && f <= b.HighHz+slack {
				return math.Min(math.Max(f, b.LowHz), b.HighHz), i
			}
		}
	}
	return f, -1
}

// outside is the error of a sweep that leaves the calibrated bands.
func (s *Solved) outside(frequencyHz []float64) error {
	span := Band{math.Inf(1), math.Inf(-1)}
	for _, f := range frequencyHz {
		span.LowHz, span.HighHz = math.Min(span.LowHz, f), math.Max(span.HighHz, f)
	}
	return mismatch("the sweep covers %v, the standards cover %s", span, listed(s.Bands()))
}
