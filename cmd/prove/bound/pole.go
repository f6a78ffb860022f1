package bound

import "math"

// Background says what lies under a resonance of unknown amplitude.
type Background int

// The backgrounds.
const (
	NoBackground       Background = iota
	ConstantBackground            // an unknown complex constant
	SlopingBackground             // with an unknown complex slope
)

// PoleDeviations are the least standard deviations for a single resonance.
type PoleDeviations struct {
	CentreOverBandwidth    float64 // sd(f0)/B
	BandwidthOverBandwidth float64 // sd(B)/B, which is sd(Q)/Q
	AmplitudeRelative      float64 // sd(|A|)/|A|
}

// Pole returns the bound for samples of S = A/(1 + 2j (f - f0)/B) with A complex and unknown, at frequencies given in bandwidths from f0, in
// circular complex noise of total variance |A|^2/snr (snr a ratio of powers, at the peak), over a background.
func Pole(frequencies []float64, snr float64, background Background) (PoleDeviations, error) {
	p := 4 + 2*int(background)
	fisher := make([]float64, p*p)
	for _, x := range frequencies {
		s := 1 / complex(1, 2*x)
		bySquare := 2i * s * s // dS/df0 = A 2j/B s^2, dS/dB = A 2j x/B s^2
		d := []complex128{bySquare, bySquare * complex(x, 0), s, 1i * s, 1, 1i, complex(x, 0), complex(0, x)}[:p]
		for k := range p {
			for l := range p {
				fisher[k*p+l] += 2 * snr * (real(d[k])*real(d[l]) + imag(d[k])*imag(d[l]))
			}
		}
	}
	inverse, ok := inverted(fisher, p)
	if !ok {
		return PoleDeviations{}, ErrUndetermined
	}
	return PoleDeviations{math.Sqrt(inverse[0]), math.Sqrt(inverse[p+1]), math.Sqrt(inverse[2*p+2])}, nil
}
