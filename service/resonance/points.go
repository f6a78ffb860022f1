package resonance

import "math"

// points is a sweep made ready for fitting: each sample reduced to the plane in which every fixture network looks the same.
//
// With D = 1 a network gives T = A + k F, k = B - A C, and with D = 0 (the sample is an impedance) T = B/C + k F, k = A/C, where
//
//	D = 1:   F = Y/(1 + C Y)          C is the impedance that the network shows the unit
//	D = 0:   F = 1/Y
//
// so what is left of a network is C and the modulus of k. F - (T - A)/k is the residual of a sample divided by k; times |k| it has the
// length of the residual of the raw sample, and white noise stays white. The residuals of the fit are therefore in units of the
// raw sample although A and B no longer appear in them. All slices have one length; nothing is allocated once they have grown.
type points struct {
	n           int
	referenceHz float64 // fs is counted from here, so that f - fs keeps all its digits
	impedance   bool    // D = 0

	frequencyHz []float64
	angular     []float64 // 2 pi f
	offsetHz    []float64 // f - referenceHz, exact
	inverse     []float64 // 1/f

	sourceRe, sourceIm []float64 // C, ohm
	scale              []float64 // |k|, raw sample per unit of F

	rawRe, rawIm   []float64 // T/k: turned by a free phase, then
	openRe, openIm []float64 // A/k (or B/(C k)) is taken off it
	re, im         []float64 // the sample as F, at free phase 0
}

// resize gives every slice the length n, keeping what has been allocated.
func (p *points) resize(n int) {
	p.n = n
	for _, s := range []*[]float64{&p.frequencyHz, &p.angular, &p.offsetHz, &p.inverse, &p.sourceRe, &p.sourceIm, &p.scale,
		&p.rawRe, &p.rawIm, &p.openRe, &p.openIm, &p.re, &p.im} {
		*s = grown(*s, n)
	}
}

// grown returns a slice of length n, on the old memory when that is large enough. Contents are undefined.
func grown(s []float64, n int) []float64 {
	if cap(s) < n {
		return make([]float64, n)
	}
	return s[:n]
}

// prepare fills the points from a request whose shapes have been checked.
func (p *points) prepare(req *Request) {
	s := req.Sweep
	n := s.Points()
	p.resize(n)
	stretch := 1 + req.ClockOffset
	low, high := math.Inf(1), math.Inf(-1)
	for i := range n {
		f := s.FrequencyHz[i]
		if s.Grid != nil {
			f = s.Grid.At(i)
		}
		f *= stretch
		p.frequencyHz[i] = f
		low, high = math.Min(low, f), math.Max(high, f)
	}
	p.referenceHz = low + (high-low)/2
	for i, f := range p.frequencyHz {
		p.angular[i] = 2 * math.Pi * f
		p.offsetHz[i] = f - p.referenceHz
		p.inverse[i] = 1 / f
	}
	t := req.Terms
	p.impedance = !req.ScaleUnknown && t.D == 0
	for i := range n {
		sample := complex(s.Re[i], 0)
		if s.Im != nil {
			sample = complex(s.Re[i], s.Im[i])
		}
		open, k, source := complex128(0), complex128(1), complex128(0)
		switch {
		case req.ScaleUnknown: // the sample itself is the plane
		case p.impedance:
			open, k = t.B[i]/t.C[i], t.A[i]/t.C[i]
		default:
			open, k, source = t.A[i], t.B[i]-t.A[i]*t.C[i], t.C[i]
		}
		inverse := 1 / k
		raw := sample * inverse
		open *= inverse
		p.scale[i] = math.Hypot(real(k), imag(k))
		p.sourceRe[i], p.sourceIm[i] = real(source), imag(source)
		p.rawRe[i], p.rawIm[i] = real(raw), imag(raw)
		p.openRe[i], p.openIm[i] = real(open), imag(open)
		p.re[i], p.im[i] = real(raw-open), imag(raw-open)
	}
}

// span returns the lowest and highest frequency, in hertz from the reference.
func (p *points) span() (low, high float64) {
	low, high = math.Inf(1), math.Inf(-1)
	for _, d := range p.offsetHz {
		low, high = math.Min(low, d), math.Max(high, d)
	}
	return low, high
}

// sourceAt returns the impedance that the network shows the unit, in ohm, at the point nearest to an offset from the reference.
func (p *points) sourceAt(offsetHz float64) complex128 {
	i := p.nearest(offsetHz)
	return complex(p.sourceRe[i], p.sourceIm[i])
}

// nearest returns the index of the point nearest to an offset from the reference.
func (p *points) nearest(offsetHz float64) int {
	best, distance := 0, math.Inf(1)
	for i, d := range p.offsetHz {
		if a := math.Abs(d - offsetHz); a < distance {
			best, distance = i, a
		}
	}
	return best
}
