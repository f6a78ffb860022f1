package resonance

import (
	"math"
	"math/cmplx"
)

// null is the description of a sweep that shows no resonance: in the plane of points a complex constant with a complex slope, and of
// magnitudes a level with a slope. A capacitance
// with its loss, a resistor, an open and a short are all of this form over one window, whatever the cables add.
type null struct {
	value, slope complex128 // at the middle, and per half span
	sumOfSquares float64    // of what is left, in units of the raw sample, over the points counted
	constant     float64    // the same without the slope
	points       int        // counted
	halfSpan     float64    // half the sweep over its middle frequency
	seen         residuals
}

// robustNull fits the null to all points, and again without those that are wild to it and stand alone.
func (f *Fitter) robustNull() null {
	z := f.fitNull(nil, 0)
	for range 3 {
		wild := z.seen.wild
		if wild == 0 {
			break
		}
		z = f.fitNull(f.shift, z.seen.limit)
		if z.seen.wild == wild {
			break
		}
	}
	return z
}

// fitNull fits the null to the points at which the residuals given are no longer than the root of limit; without residuals, to all.
func (f *Fitter) fitNull(fit []float64, limit float64) (z null) {
	p := &f.points
	re, im, scale := p.re, p.im, p.scale
	if f.parts() == 1 {
		re, im, scale = f.magnitude.sample, f.magnitude.zero, f.magnitude.one
	}
	low, high := p.span()
	middle, half := (low+high)/2, (high-low)/2
	wild := func(i int) bool {
		return fit != nil && fit[2*i]*fit[2*i]+fit[2*i+1]*fit[2*i+1] > limit
	}
	var s, sx, sxx float64
	var sv, sxv complex128
	for i := range p.n {
		if wild(i) {
			continue
		}
		w := scale[i] * scale[i]
		x := (p.offsetHz[i] - middle) / half
		v := complex(w*re[i], w*im[i])
		s += w
		sx += w * x
		sxx += w * x * x
		sv += v
		sxv += complex(x, 0) * v
	}
	mean := sv / complex(s, 0)
	if determinant := s*sxx - sx*sx; p.impedance || determinant <= 0 {
		// Near its resonance the impedance of a unit is itself a level with a slope. What shows none has next to no slope either.
		z.value = mean
	} else {
		z.value = (complex(sxx, 0)*sv - complex(sx, 0)*sxv) / complex(determinant, 0)
		z.slope = (complex(s, 0)*sxv - complex(sx, 0)*sv) / complex(determinant, 0)
	}
	middleHz := p.referenceHz + middle
	z.halfSpan = half / middleHz
	level := func(i int) complex128 {
		x := (p.offsetHz[i] - middle) / half
		v := z.value + complex(x, 0)*z.slope
		if p.impedance {
			v = complex(real(v), imag(v)*middleHz*p.inverse[i]) // a capacitance behind a resistance
		}
		return v
	}
	f.shift = grown(f.shift, 2*p.n)
	for i := range p.n {
		v := level(i)
		skip := wild(i) // before f.shift, which may be what it looks at, is written
		a, b := scale[i]*(re[i]-real(v)), scale[i]*(im[i]-imag(v))
		f.shift[2*i], f.shift[2*i+1] = a, b
		if skip {
			continue
		}
		z.points++
		z.sumOfSquares += a*a + b*b
		a, b = scale[i]*(re[i]-real(mean)), scale[i]*(im[i]-imag(mean))
		z.constant += a*a + b*b
	}
	f.scratch = z.seen.look(f.shift, f.parts(), f.scratch, f.floor)
	if f.parts() == 1 {
		f.magnitude.level(&z, wild, func(i int) float64 { return (p.offsetHz[i] - middle) / half })
	}
	return z
}

// against returns the sum of squares that a resonance has to be better than. A level that changes by more than a few percent over the sweep is
// no longer one if the sweep is narrow: inside a resonance, or in its tail, a sample may change evenly, and only the constant stands for nothing.
func (z *null) against() float64 {
	const even, narrow = 0.05, 0.01
	if z.halfSpan < narrow && cmplx.Abs(z.slope) > even*cmplx.Abs(z.value) {
		return z.constant
	}
	return z.sumOfSquares
}

// admittance returns what the null says the unit is: its admittance at the middle of the sweep, in siemens.
func (f *Fitter) admittance(z null) complex128 {
	if f.points.impedance {
		return 1 / z.value
	}
	if f.parts() == 1 {
		// A magnitude does not tell of what; near an open, where this matters, the unit is a capacitance.
		z.value *= complex(0, 1/f.points.scale[0])
	}
	return z.value / (1 - f.points.sourceAt(0)*z.value)
}

const (
	// nearShort is how far a sample of a short may lie from a perfect one in w = C F, which is 0 for an open and 1 for a short.
	nearShort = 0.15

	// shortOhm stands for it where the samples are admittances or impedances and nothing says what the unit is to be compared with.
	shortOhm = 1.0

	// An empty fixture: a capacitance below this part of the expected one, or below the plain figure where none is expected. Real
	// units begin at 0.4 pF (0.42 pF of a 1.2 x 1.0 mm unit, Nordic Semiconductor nRF54 data sheet, crystal oscillator table).
	emptyPart       = 0.25
	emptyFarad      = 0.25e-12
	leastBoundFarad = 0.01e-12 // no less is said of an empty one: what a contact head repeats to
	leastLoss       = 0.01     // of the admittance: a smaller conductance is not worth a word
	mostStrange     = 0.02     // share of the points that may lie outside and be called wild
)

// shorted says that the whole sweep lies near a short.
func (f *Fitter) shorted() bool {
	p := &f.points
	outside := 0
	for i := range p.n {
		v := complex(p.re[i], p.im[i])
		source := complex(p.sourceRe[i], p.sourceIm[i])
		near := false
		switch {
		case f.parts() == 1:
			near = math.Abs(f.magnitude.sample[i]*cmplx.Abs(source)/p.scale[i]-1) < nearShort
		case p.impedance:
			near = cmplx.Abs(v) < shortOhm
		case source == 0:
			near = cmplx.Abs(v) > 1/shortOhm
		default:
			near = cmplx.Abs(source*v-1) < nearShort
		}
		if !near {
			outside++
		}
	}
	return float64(outside) <= mostStrange*float64(p.n)
}

// empty says that the admittance is too small for a unit.
func (f *Fitter) empty(admittance complex128, deviation float64) bool {
	least := emptyFarad
	if c := f.request.Expected.ShuntCapacitanceFarad; c > 0 {
		least = emptyPart * c
	}
	return cmplx.Abs(admittance) < 2*math.Pi*f.points.referenceHz*least+3*deviation
}

// active returns how far the samples reach into what no passive unit can give, as a share of the range between open and short (of the largest
// sample, where there is no such range): the largest excess that more than mostStrange of the points show. With F = Y/(1 + C Y),
//
//	Re Y |1 + C Y|^2 = Re(F conj(1 - C F))
//
// is a distance in the plane of F, so noise in it is that of the sample.
// The second result is the noise of a sample on the same scale, as neighbouring samples have it.
func (f *Fitter) active() (excess, noise float64) {
	p := &f.points
	// Noise that fills a good part of the range is on both sides of its ends.
	const mostNoise = 0.05
	relative := f.relativeNoise(f.neighbourNoise())
	if relative > mostNoise {
		return 0, relative
	}
	f.scratch = grown(f.scratch, p.n)
	largest := 0.0
	for i := range p.n {
		v := complex(p.re[i], p.im[i])
		source := complex(p.sourceRe[i], p.sourceIm[i])
		f.scratch[i] = -real(v*cmplx.Conj(1-source*v)) * cmplx.Abs(source)
		if source == 0 {
			f.scratch[i] = -real(v)
			largest = math.Max(largest, cmplx.Abs(v))
		}
	}
	excess = ranked(f.scratch, p.n-2-int(mostStrange*float64(p.n)))
	if largest > 0 {
		excess /= largest
	}
	return excess, relative
}

// neighbourNoise returns the noise of a sample, in units of the raw sample, from the median of the second differences. No model enters.
func (f *Fitter) neighbourNoise() float64 {
	p := &f.points
	f.scratch = grown(f.scratch, p.n-2)
	for i := range f.scratch {
		re := p.re[i] - 2*p.re[i+1] + p.re[i+2]
		im := p.im[i] - 2*p.im[i+1] + p.im[i+2]
		f.scratch[i] = p.scale[i] * math.Hypot(re, im)
	}
	return median(f.scratch) / math.Sqrt(6) / medianOfComplex
}
