package network

import (
	"cmp"
	"math"
	"slices"
)

// Standards read as magnitudes give no three complex terms. What they give is the height of the through connection: the network is taken as
// nominal, referred to the short standard, and loads and check standards prove that it is. With Zs the short's own impedance
//
//	A = 0    B = |Ts| |1 + Zs/Zt| Zt    C = Zt nominal
//
// The influences are the short's values and noise, the mismatch of the ports (see mismatchOf), the nominal termination, and as leakage
// what an open standard showed, of which nobody knows the phase.

// solveMagnitudes fills the segments from the short standards, one for each sweep of one.
func (v *solver) solveMagnitudes(s *Solved) error {
	s.magnitudeOnly = true
	slices.SortStableFunc(v.traces, func(a, b *trace) int { return cmp.Compare(a.band.LowHz, b.band.LowHz) })
	for _, t := range v.traces {
		if t.standard.Kind != Short {
			continue
		}
		for i := range s.segments {
			if b := s.segments[i].band; t.band.LowHz < b.HighHz && b.LowHz < t.band.HighHz {
				return mismatch("two shorts were read over %v and %v; magnitudes are referred to one short in a band", b, t.band)
			}
		}
		s.segments = append(s.segments, v.magnitudeSegment(t))
	}
	v.magnitudeInfluences(s)
	for _, t := range append(append([]*trace(nil), v.traces...), v.checks...) {
		switch t.standard.Kind {
		case Short:
			continue
		case Open:
			if err := v.proveMagnitudeOpen(s, t); err != nil {
				return err
			}
			continue
		}
		worst, read := v.readMagnitude(s, t)
		if !read {
			return mismatch("%s was read over %v, the shorts cover %s", t.standard.describe(), t.band, listed(s.Bands()))
		}
		if !(worst.DeviationOhm <= worst.ExpandedUncertaintyOhm) {
			return mismatch("%s %v", t.standard.describe(), worst)
		}
		s.readings = append(s.readings, worst)
	}
	return nil
}

// magnitudeSegment is the band of one short.
func (v *solver) magnitudeSegment(t *trace) segment {
	g := segment{band: t.band, grid: newGrid(nodes(t.band, []*trace{t}))}
	all := make([]three, len(g.grid.x))
	for i, f := range g.grid.x {
		all[i] = v.referredTo(t.standard, real(t.at(f)), f)
	}
	g.setTerms(all)
	return g
}

// referredTo returns the terms that follow from a short's magnitude.
func (v *solver) referredTo(short *Standard, magnitude, f float64) three {
	zt := complex(v.scaleOhm, 0)
	own := short.impedanceOhm(f)
	return three{0, complex(magnitude*abs(1+own/zt), 0) * zt, zt}
}

// magnitudeInfluences lists and keeps what is uncertain about the shorts and the leakage.
func (v *solver) magnitudeInfluences(s *Solved) {
	shorts := 0
	for _, t := range v.traces {
		if t.standard.Kind != Short {
			continue
		}
		g := &s.segments[shorts]
		shorts++
		g.coarse = newGrid([]float64{g.band.LowHz, g.band.HighHz})
		add := func(n influence, change func(f float64) three) (k int) {
			if k = slices.Index(s.influences, n); k < 0 {
				k, s.influences = len(s.influences), append(s.influences, n)
			}
			g.widen(k + 1)
			for i, f := range g.coarse.x {
				g.setChange(k, i, change(f), turn(g.delaySecond, f, g.band.LowHz))
			}
			return k
		}
		for _, value := range t.standard.uncertainValues() {
			add(influence{name: InfluenceStandards, group: v.valueGroup(t, value.name)}, func(f float64) three {
				moved, magnitude := value.shifted(t.standard), real(t.at(f))
				return v.referredTo(&moved, magnitude, f).minus(v.referredTo(t.standard, magnitude, f))
			})
		}
		if t.noise > 0 {
			k := add(influence{name: InfluenceNoise, group: string(Short)}, func(f float64) three {
				return three{b: v.referredTo(t.standard, 1, f).b}
			})
			g.noise[k] = t
		}
		if leak := v.leakage(g.band); leak > 0 {
			add(influence{name: InfluenceMismatch, group: "leakage, real part"}, func(float64) three { return three{a: complex(leak/math.Sqrt2, 0)} })
			add(influence{name: InfluenceMismatch, group: "leakage, imaginary part"}, func(float64) three { return three{a: complex(0, leak/math.Sqrt2)} })
		}
	}
	for i := range s.segments {
		s.segments[i].widen(len(s.influences))
	}
}

// widen makes room for the changes of so many influences; those added change nothing.
func (g *segment) widen(influences int) {
	for len(g.changes) < influences {
		g.changes, g.noise = append(g.changes, nil), append(g.noise, nil)
	}
}

// leakage returns the largest magnitude that an open read in the band; 0 without one.
func (v *solver) leakage(b Band) float64 {
	largest := 0.0
	for _, t := range v.traces {
		if t.standard.Kind != Open {
			continue
		}
		for i, f := range t.grid.x {
			if b.LowHz <= f && f <= b.HighHz {
				largest = math.Max(largest, real(t.reduced[i]))
			}
		}
	}
	return largest
}

// proveMagnitudeOpen looks whether an open lies far enough below the short.
func (v *solver) proveMagnitudeOpen(s *Solved, t *trace) error {
	for _, f := range t.grid.x {
		inside, k := s.locate(f, 0)
		if k < 0 {
			continue
		}
		terms, _ := s.segments[k].at(inside, 0)
		if short, open := abs(terms.b/terms.c), real(t.at(f)); !(short >= leastContrast*open) {
			return mismatch("short and open read too much alike at %s: moduli %.4g and %.4g, a ratio of %.3g where at least %d is expected", frequency(f), short, open, short/open, leastContrast)
		}
	}
	return nil
}

// readMagnitude compares a load or check standard with what the nominal network makes of the short, Z = Zt (|Ts/T| - 1), where it is worst
// against its expanded uncertainty.
func (v *solver) readMagnitude(s *Solved, t *trace) (worst CheckReading, read bool) {
	u := math.Hypot(DefaultNominalTermination, mismatchOf(s.network, s.referenceImpedanceOhm, s.terminationOhm))
	gain := math.Pow(10, s.drift.gainDB/20) - 1
	for _, f := range t.grid.x {
		inside, k := s.locate(f, 0)
		if k < 0 {
			continue
		}
		g := &s.segments[k]
		terms, _ := g.at(inside, 0)
		a, b := t.standard.ratio(f)
		sample := terms.sample(a, b)
		deviation := v.deviation(t, f, terms)
		// Moduli move with the whole of a deviation at worst; termination and drift act on the ratio.
		variance := deviation*deviation + square(sample)*gain*gain
		moved := three{terms.a, terms.b * complex(1+u, 0), terms.c * complex(1+u, 0)}
		variance += square(moved.sample(a, b) - sample)
		for n := range s.influences {
			if g.changes[n] != nil {
				d, _ := g.changeAt(n, inside, 0)
				variance += square(g.scale(n, &s.influences[n], Band{f, f}) * (d.a*a + d.b*b - sample*d.c*b) / (a + terms.c*b))
			}
		}
		stated := a / b
		r := CheckReading{File: t.standard.File, FrequencyHz: f, StatedOhm: complex(abs(stated), 0)}
		r.ReadOhm = complex(v.scaleOhm*(abs(terms.b/terms.c)/real(t.at(f))-1), 0)
		expected := v.scaleOhm * (abs(terms.b/terms.c)/abs(sample) - 1)
		r.DeviationOhm = math.Abs(real(r.ReadOhm) - expected)
		r.ExpandedUncertaintyOhm = checkCoverage * math.Sqrt(variance) * v.scaleOhm * abs(terms.b/terms.c) / square(sample)
		if !read || r.DeviationOhm*worst.ExpandedUncertaintyOhm > worst.DeviationOhm*r.ExpandedUncertaintyOhm || math.IsNaN(r.DeviationOhm) {
			worst, read = r, true
		}
	}
	return worst, read
}
