package network

import "slices"

// trace is the sweep of one standard, ready to be read at any frequency of its band.
type trace struct {
	standard    *Standard
	band        Band
	grid        grid
	reduced     []complex128 // samples with the mean delay taken out
	delaySecond float64
	smooth      *polynomial // nil: interpolated as read
	noise       float64     // complex rms of one reading; 0: unknown

	place           int // in the calibration's list, from 1
	valueInfluences []int
	noiseInfluence  int
}

// newTrace prepares a standard. receiverNoise is the stated complex rms of one sample, 0 when it is not known.
func newTrace(s *Standard, receiverNoise float64) *trace {
	n := len(s.FrequencyHz)
	t := &trace{standard: s, band: Band{s.FrequencyHz[0], s.FrequencyHz[n-1]}, grid: newGrid(s.FrequencyHz), reduced: make([]complex128, n)}
	for i := range t.reduced {
		t.reduced[i] = complex(s.Re[i], 0)
		if !s.magnitudeOnly() {
			t.reduced[i] = complex(s.Re[i], s.Im[i])
		}
	}
	if !s.magnitudeOnly() {
		t.delaySecond = meanDelay(s.FrequencyHz, t.reduced)
		for i, f := range s.FrequencyHz {
			t.reduced[i] *= turn(-t.delaySecond, f, t.band.LowHz)
		}
	}
	if p, ok := fitPolynomial(s.FrequencyHz, t.reduced, receiverNoise); ok {
		t.smooth, t.noise = p, p.noise
		return t
	}
	t.noise = receiverNoise
	if t.noise == 0 {
		t.noise = roughNoise(t.reduced)
	}
	return t
}

// covers reports whether the band lies inside the trace.
func (t *trace) covers(b Band) bool { return t.band.LowHz <= b.LowHz && b.HighHz <= t.band.HighHz }

// at returns the sample at a frequency inside the band.
func (t *trace) at(f float64) complex128 {
	var reduced complex128
	if t.smooth != nil {
		reduced, _ = t.smooth.at(f)
	} else {
		first, w := t.grid.weights(f, t.grid.cell(f, 0))
		reduced = t.grid.apply(t.reduced, first, &w)
	}
	return reduced * turn(t.delaySecond, f, t.band.LowHz)
}

// variance returns the noise variance E|n|^2 of at(f). Between nodes it is that of one reading, which is right within a third.
func (t *trace) variance(f float64) float64 {
	if t.smooth == nil {
		return t.noise * t.noise
	}
	_, leverage := t.smooth.at(f)
	return t.noise * t.noise * leverage
}

// varianceOver returns the noise variance that a sweep over the band has in common: that of the polynomial in the middle, or of one reading
// over the number of readings inside, which is what independent errors of neighbours leave of a fit across them.
func (t *trace) varianceOver(b Band) float64 {
	if t.smooth != nil {
		return t.variance(min(max((b.LowHz+b.HighHz)/2, t.band.LowHz), t.band.HighHz))
	}
	low, _ := slices.BinarySearch(t.grid.x, b.LowHz)
	high, _ := slices.BinarySearch(t.grid.x, b.HighHz)
	return t.noise * t.noise / float64(max(1, high-low))
}

func median(values []float64) float64 {
	slices.Sort(values)
	n := len(values)
	if n%2 == 1 {
		return values[n/2]
	}
	return (values[n/2-1] + values[n/2]) / 2
}
