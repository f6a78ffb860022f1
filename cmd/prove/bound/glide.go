package bound

import (
	"math"
	"math/cmplx"
)

// Glide returns the response of a resonator to a source whose frequency moves at a constant rate, relative to its settled peak, and the
// derivative by x:
//
//	a = integral over 0..inf of exp(-u - j x u + j sigma u^2/2) du
//
// where x = 2 (f - f0)/B is the momentary detuning and sigma = 2 (df/dt)/(pi B^2) the rate, positive upwards. At rest it is 1/(1 + jx).
// The integral is taken as it stands, by Simpson's rule in steps that follow the fastest turn of the integrand, to about 1e-11 for |x| below 100
// and |sigma| below 10.
// Source: B. Cowan, A. Morris-Costigliola, G. Nichols, Solution to the gliding tone problem, arXiv 1910.10995 (2019).
func Glide(x, sigma float64) (response, slope complex128) {
	const longest = 36.0 // exp(-36) is 2e-16
	fastest := 1 + math.Abs(x) + math.Abs(sigma)*longest
	n := 2 * int(longest*math.Max(250, 40*fastest))
	h := longest / float64(n)
	for k := range n + 1 {
		u := h * float64(k)
		weight := 2 * h / 3
		switch {
		case k == 0 || k == n:
			weight = h / 3
		case k%2 == 1:
			weight = 4 * h / 3
		}
		v := complex(weight*math.Exp(-u), 0) * cmplx.Rect(1, u*(sigma*u/2-x))
		response += v
		slope += v * complex(0, -u)
	}
	return response, slope
}

// GlideTrace is what a person reads off a trace taken with a gliding source, in bandwidths.
type GlideTrace struct {
	MagnitudePeakShift, ConductancePeakShift, ZeroPhaseShift float64
	PeakMagnitude, PeakConductance                           float64 // relative to a settled sweep
	ApparentWidth                                            float64 // between the points 3 dB (1/sqrt 2) below the peak magnitude
}

// Trace returns that for one rate.
func Trace(sigma float64) GlideTrace {
	byMagnitude := func(x float64) float64 { // half the derivative of |a|^2
		a, da := Glide(x, sigma)
		return real(a)*real(da) + imag(a)*imag(da)
	}
	byConductance := func(x float64) float64 { _, da := Glide(x, sigma); return real(da) }
	phase := func(x float64) float64 { a, _ := Glide(x, sigma); return imag(a) }
	magnitude := func(x float64) float64 { a, _ := Glide(x, sigma); return cmplx.Abs(a) }
	peak := root(byMagnitude, -1, 4)
	conductance := root(byConductance, -1, 4)
	var t GlideTrace
	t.MagnitudePeakShift, t.ConductancePeakShift, t.ZeroPhaseShift = peak/2, conductance/2, root(phase, -1, 4)/2
	a, _ := Glide(conductance, sigma)
	t.PeakMagnitude, t.PeakConductance = magnitude(peak), real(a)
	below := func(x float64) float64 { return t.PeakMagnitude/math.Sqrt2 - magnitude(x) }
	t.ApparentWidth = (root(below, peak, peak+4) - root(func(x float64) float64 { return -below(x) }, peak-4, peak)) / 2
	return t
}

// root finds where f falls or rises through zero between two points at which its signs differ: bisection, then the last secant.
func root(f func(float64) float64, low, high float64) float64 {
	atLow := f(low)
	for high-low > 1e-7 {
		middle := low + (high-low)/2
		if v := f(middle); (v > 0) == (atLow > 0) {
			low, atLow = middle, v
		} else {
			high = middle
		}
	}
	atHigh := f(high)
	return low - atLow*(high-low)/(atHigh-atLow)
}
