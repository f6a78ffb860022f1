package network

import (
	"fmt"
	"math"
	"strings"
)

// What standards may not do, or the calibration is a mismatch.
const (
	leastContrast      = 3    // sample of a short over that of an open, in transmission
	leastTurn          = 1    // distance of short and open in reflection over their mean modulus; 2 is ideal
	largestDeparture   = 0.15 // of the termination from its nominal value, relative
	largestResidual    = 5    // rms of the standards' residuals over what their uncertainties allow
	checkCoverage      = 3    // k of the expanded uncertainty that a check standard must keep
	checkReadingBlocks = 16   // a check standard is judged on so many means over its band
)

// CheckReading is how a known standard that was not used in the solution reads in it, where it reads worst.
type CheckReading struct {
	File                   string
	FrequencyHz            float64
	StatedOhm, ReadOhm     complex128
	DeviationOhm           float64 // |read - stated|
	ExpandedUncertaintyOhm float64 // k = 3: noise, drift, contact, stated values of all standards
}

// String tells the reading in words.
func (r CheckReading) String() string {
	return fmt.Sprintf("reads %s ohm at %s where %s ohm is stated: %.3g ohm off, with an expanded uncertainty (k = %d) of %.3g ohm",
		ohms(r.ReadOhm), frequency(r.FrequencyHz), ohms(r.StatedOhm), r.DeviationOhm, checkCoverage, r.ExpandedUncertaintyOhm)
}

// prove holds the solved terms against the nominal network, the standards against each other and the check standards against both.
func (v *solver) prove(s *Solved) error {
	for i := range s.segments {
		g := &s.segments[i]
		if err := g.proveNetwork(s.network, v.calibration.terminationOhm()); err != nil {
			return err
		}
		if err := v.proveStandards(g); err != nil {
			return err
		}
	}
	for _, t := range v.checks {
		worst, ok := v.readCheck(s, t)
		if !ok {
			return mismatch("%s was read over %v, the standards cover %s", t.standard.describe(), t.band, listed(s.Bands()))
		}
		if !(worst.DeviationOhm <= worst.ExpandedUncertaintyOhm) {
			return mismatch("%s %v", t.standard.describe(), worst)
		}
		s.readings = append(s.readings, worst)
	}
	return nil
}

// proveNetwork looks at the terms of every node: whether a short can be told from an open, and whether the termination is about the nominal one.
func (g *segment) proveNetwork(k Kind, nominalOhm float64) error {
	for i, f := range g.grid.x {
		open, short := abs(g.a[i]), abs(g.b[i]/g.c[i])
		if k == Reflection {
			apart := 2 * abs(g.b[i]/g.c[i]-g.a[i]) / (short + open)
			if !(apart >= leastTurn) {
				return mismatch("short and open read too much alike at %s: they lie %.3g of their modulus apart, at least %d is expected", frequency(f), apart, leastTurn)
			}
		} else if !(short >= leastContrast*open) {
			return mismatch("short and open read too much alike at %s: moduli %.4g and %.4g, a ratio of %.3g where at least %d is expected", frequency(f), short, open, short/open, leastContrast)
		}
		if nominalOhm == 0 {
			continue
		}
		if departure := abs(g.c[i]/complex(nominalOhm, 0) - 1); !(departure <= largestDeparture) {
			return mismatch("the standards give a termination of %s ohm at %s, %.3g %% off the nominal %.6g ohm (at most %.3g %%): a standard is not what it is said to be, or the network is another",
				ohms(g.c[i]), frequency(f), 100*departure, nominalOhm, 100*largestDeparture)
		}
	}
	return nil
}

// proveStandards looks at what more than three standards leave unexplained.
//
//	sum |r|^2/s^2 over the standards, over their number less three, averaged over the band: 1 when the stated uncertainties are true
func (v *solver) proveStandards(g *segment) error {
	traces := v.within(g.band)
	if len(traces) <= needed {
		return nil
	}
	sum, largest := 0.0, 0.0
	var where string
	for _, f := range g.coarse.x {
		terms, _ := g.at(f, 0)
		for _, t := range traces {
			a, b := t.standard.ratio(f)
			residual := abs(t.at(f)-terms.sample(a, b)) / v.deviation(t, f, terms)
			sum += residual * residual
			if residual > largest {
				largest = residual
				where = fmt.Sprintf("%s at %s", t.standard.describe(), frequency(f))
			}
		}
	}
	rms := math.Sqrt(sum / float64((len(traces)-needed)*len(g.coarse.x)))
	if !(rms <= largestResidual) {
		return mismatch("the standards %s contradict each other: they miss the common solution by %.3g times what their uncertainties allow (at most %d), most of all %s",
			names(traces), rms, largestResidual, where)
	}
	return nil
}

// readCheck corrects the readings of a check standard and returns where it is worst against its expanded uncertainty; false when it was
// read nowhere in the calibrated bands. Readings are averaged over blocks of the band, so that noise does not hide a deviation and
// hundreds of points are not hundreds of chances to fail.
func (v *solver) readCheck(s *Solved, t *trace) (worst CheckReading, read bool) {
	var inside []float64
	for _, f := range t.grid.x {
		if _, k := s.locate(f, 0); k >= 0 {
			inside = append(inside, f)
		}
	}
	blocks := min(checkReadingBlocks, len(inside))
	for k := range blocks {
		block := inside[k*len(inside)/blocks : (k+1)*len(inside)/blocks]
		r := v.readBlock(s, t, block)
		if !read || r.DeviationOhm*worst.ExpandedUncertaintyOhm > worst.DeviationOhm*r.ExpandedUncertaintyOhm || math.IsNaN(r.DeviationOhm) {
			worst, read = r, true
		}
	}
	return worst, read
}

// readBlock corrects the readings of a check standard at some neighbouring frequencies and averages them.
func (v *solver) readBlock(s *Solved, t *trace, block []float64) CheckReading {
	count := complex(float64(len(block)), 0)
	r := CheckReading{File: t.standard.File, FrequencyHz: block[len(block)/2]}
	for _, f := range block {
		inside, k := s.locate(f, 0)
		terms, _ := s.segments[k].at(inside, 0)
		sample := t.at(f)
		r.ReadOhm += (terms.b - terms.c*sample) / (sample - terms.a) / count
		r.StatedOhm += t.standard.impedanceOhm(f) / count
	}
	r.DeviationOhm = abs(r.ReadOhm - r.StatedOhm)

	// The uncertainty is formed in the plane of the samples, where the influences live, and taken to ohms by dZ/dT = (A C - B)/(T - A)^2.
	f := r.FrequencyHz
	inside, k := s.locate(f, 0)
	g := &s.segments[k]
	terms, _ := g.at(inside, 0)
	a, b := t.standard.ratio(f)
	sample := terms.sample(a, b)
	variance := v.deviation(t, f, terms)
	variance *= variance
	if t.smooth == nil {
		variance -= t.noise * t.noise * (1 - 1/float64(len(block)))
	}
	gain, turned := math.Pow(10, s.drift.gainDB/20)-1, s.drift.phaseDeg*math.Pi/180
	variance += square(sample) * (gain*gain + turned*turned)
	for n := range s.influences {
		if g.changes[n] == nil {
			continue
		}
		d, _ := g.changeAt(n, inside, 0)
		forth := turn(g.delaySecond, inside, g.band.LowHz)
		scale := g.scale(n, &s.influences[n], Band{block[0], block[len(block)-1]})
		variance += square(scale * (forth*(d.a*a+d.b*b) - sample*d.c*b) / (a + terms.c*b))
	}
	slope := abs((terms.a*terms.c - terms.b) / ((sample - terms.a) * (sample - terms.a)))
	r.ExpandedUncertaintyOhm = checkCoverage * slope * math.Sqrt(variance)
	return r
}

func frequency(f float64) string {
	switch {
	case f >= 1e6:
		return fmt.Sprintf("%.9g MHz", f/1e6)
	case f >= 1e3:
		return fmt.Sprintf("%.9g kHz", f/1e3)
	}
	return fmt.Sprintf("%.9g Hz", f)
}

// ohms prints an impedance, its reactance only where it counts.
func ohms(z complex128) string {
	if math.Abs(imag(z)) < 1e-3*math.Abs(real(z)) {
		return fmt.Sprintf("%.5g", real(z))
	}
	return fmt.Sprintf("%.5g%+.3gj", real(z), imag(z))
}

func joined(parts []string) string { return strings.Join(parts, ", ") }
