package survey

import (
	"math"

	"example.com/admit/service/sweep"
)

// samples is a sweep made ready for fitting. With D = 1 a network gives T = A + k F, F = Y/(1 + C Y), k = B - A C. Samples are kept as F; a
// residual in F times |k| has the length of that of the raw sample, so white noise stays white.
//
// Where the sample is an impedance (D = 0), T = B/C + k/Y, k = A/C, it is turned into the admittance, F = Y with C = 0, whose residual times
// |k|/|Y|^2 has the length of that of the raw sample: a resonance is then a pole as in any other network, and not a dip beside the pole of an
// antiresonance that may lie far outside. What that neglects is of second order in noise over impedance.
//
// All slices have one length; nothing is allocated once they have grown.
type samples struct {
	n           int
	referenceHz float64 // frequencies are counted from here, so that f - fs keeps all its digits
	impedance   bool    // the raw samples are impedances
	unknown     bool    // of the network: F is the sample

	frequencyHz, offsetHz []float64
	inverse, angular      []float64    // 1/f, 2 pi f
	source                []complex128 // C, ohm
	scale                 []float64    // |k|, raw sample per unit of F; 0 for a point left out
	value                 []complex128 // the sample as F at free phase 0
	raw, open             []complex128 // T/k and A/k: value = raw exp(-j phase) - open

	lowHz, highHz float64 // of the offsets
	stepHz        float64 // from point to point in measuring order, where that is the same throughout; else 0
	ordered       bool    // frequencies rise or fall throughout
	meanStepHz    float64 // span over n - 1
	widestStepHz  float64
	largest       float64 // length of the largest raw sample

	dwell, averaging, leadIn float64 // seconds; dwell 0: not stated
	phase                    sweep.SourcePhase
}

// grown returns a slice of length n, on the old memory when that is large enough. Contents are undefined.
func grown[T any](s []T, n int) []T {
	if cap(s) < n {
		return make([]T, n, n+n/4)
	}
	return s[:n]
}

// prepare fills the samples from a request whose shapes have been checked.
func (s *samples) prepare(req *Request) {
	w := req.Sweep
	n := len(w.FrequencyHz)
	s.n = n
	for _, x := range [...]*[]float64{&s.frequencyHz, &s.offsetHz, &s.inverse, &s.angular, &s.scale} {
		*x = grown(*x, n)
	}
	for _, x := range [...]*[]complex128{&s.source, &s.value, &s.raw, &s.open} {
		*x = grown(*x, n)
	}
	stretch := 1 + req.ClockOffset
	low, high := math.Inf(1), math.Inf(-1)
	for i := range n {
		f := w.FrequencyHz[i]
		if w.Grid != nil {
			f = w.Grid.At(i)
		}
		f *= stretch
		s.frequencyHz[i] = f
		low, high = math.Min(low, f), math.Max(high, f)
	}
	s.referenceHz = low + (high-low)/2
	s.lowHz, s.highHz = low-s.referenceHz, high-s.referenceHz
	for i, f := range s.frequencyHz {
		s.offsetHz[i], s.inverse[i], s.angular[i] = f-s.referenceHz, 1/f, 2*math.Pi*f
	}
	s.order()
	s.unknown = req.ScaleUnknown
	t := req.Terms
	s.impedance = !s.unknown && t.D == 0
	s.largest = 0
	for i := range n {
		sample := complex(w.Re[i], w.Im[i])
		open, k, source := complex128(0), complex128(1), complex128(0)
		switch {
		case s.unknown:
		case s.impedance:
			open, k = t.B[i]/t.C[i], t.A[i]/t.C[i]
		default:
			open, k, source = t.A[i], t.B[i]-t.A[i]*t.C[i], t.C[i]
		}
		inverse := reciprocal(k)
		s.raw[i], s.open[i] = sample*inverse, open*inverse
		s.value[i] = s.raw[i] - s.open[i]
		s.scale[i], s.source[i] = length(k), source
		if s.impedance {
			s.scale[i] *= square(s.value[i])
			s.value[i] = reciprocal(s.value[i])
		}
		s.largest = math.Max(s.largest, length(sample))
	}
	timing := w.Timing
	s.dwell, s.averaging, s.leadIn = timing.Dwell.Seconds(), timing.Averaging.Seconds(), timing.LeadIn.Seconds()
	if s.averaging == 0 {
		s.averaging = s.dwell
	}
	s.phase = timing.Phase
}

// order finds out how the frequencies follow each other.
func (s *samples) order() {
	n := s.n
	s.meanStepHz = (s.highHz - s.lowHz) / float64(n-1)
	s.stepHz = (s.offsetHz[n-1] - s.offsetHz[0]) / float64(n-1)
	s.widestStepHz = 0
	rising, falling := true, true
	const uneven = 0.1 // of a step: frequencies that a file prints rounded
	for i := 1; i < n; i++ {
		step := s.offsetHz[i] - s.offsetHz[i-1]
		rising, falling = rising && step >= 0, falling && step <= 0
		s.widestStepHz = math.Max(s.widestStepHz, math.Abs(step))
	}
	s.ordered = rising || falling
	for i, d := range s.offsetHz {
		if !(math.Abs(d-s.offsetHz[0]-float64(i)*s.stepHz) <= uneven*math.Abs(s.stepHz)) {
			s.stepHz = 0
			break
		}
	}
	if !s.ordered {
		s.widestStepHz = s.meanStepHz // of points in no order nothing better is known
	}
}

// nearest returns the index of the point nearest to an offset.
func (s *samples) nearest(offsetHz float64) int {
	if s.stepHz != 0 {
		i := math.Round((offsetHz - s.offsetHz[0]) / s.stepHz)
		return int(math.Max(0, math.Min(i, float64(s.n-1))))
	}
	best, distance := 0, math.Inf(1)
	for i, d := range s.offsetHz {
		if a := math.Abs(d - offsetHz); a < distance {
			best, distance = i, a
		}
	}
	return best
}

// span returns the width of the sweep in hertz.
func (s *samples) span() float64 { return s.highHz - s.lowHz }

// length is |z| without the care for extreme values that the library takes.
func length(z complex128) float64 { return math.Sqrt(real(z)*real(z) + imag(z)*imag(z)) }

// square is |z|^2.
func square(z complex128) float64 { return real(z)*real(z) + imag(z)*imag(z) }

// reciprocal is 1/z without the care for extreme values that the language takes with a division.
func reciprocal(z complex128) complex128 {
	q := 1 / (real(z)*real(z) + imag(z)*imag(z))
	return complex(real(z)*q, -imag(z)*q)
}
