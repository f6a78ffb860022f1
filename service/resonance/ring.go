package resonance

import (
	"math"

	"example.com/admit/service/sweep"
)

// timing is how long the source stayed at each frequency, in seconds.
type timing struct {
	dwell, averaging, leadIn float64
}

func timingOf(t sweep.Timing) timing {
	r := timing{dwell: t.Dwell.Seconds(), averaging: t.Averaging.Seconds(), leadIn: t.LeadIn.Seconds()}
	if r.averaging == 0 {
		r.averaging = r.dwell
	}
	return r
}

// The envelope of a resonator, at a constant drive frequency and relative to its steady state rs, decays as exp(lambda t), and a source
// of continuous phase hands it over unchanged to the next frequency. Over one dwell T of which the last Tw are averaged,
//
//	state at the end = rs + (state before - rs) E       E = exp(lambda T)
//	sample           = rs + (state before - rs) M       M = exp(lambda (T - Tw)) (exp(lambda Tw) - 1)/(lambda Tw)
//
// with nothing approximated but that the resonator's Q is large against 1. transfer holds E and M and their derivatives by lambda; since
// times only occur beside lambda, lambda times these are the derivatives by the logarithm of a factor on all times.
type transfer struct {
	end, mean     complex128
	byEnd, byMean complex128
}

func (t timing) transfer(lambda complex128) transfer {
	var r transfer
	windowed := complex(t.averaging, 0) * lambda
	grown := expOf(windowed)
	average, slope := meanExp(windowed, grown)
	wait := t.dwell - t.averaging
	if wait == 0 {
		r.end, r.mean, r.byMean = grown, average, slope*complex(t.averaging, 0)
	} else {
		before := grown // the usual half and half
		if wait != t.averaging {
			before = expOf(complex(wait, 0) * lambda)
		}
		r.end, r.mean = before*grown, before*average
		r.byMean = complex(wait, 0)*r.mean + before*slope*complex(t.averaging, 0)
	}
	r.byEnd = complex(t.dwell, 0) * r.end
	return r
}

// start returns what is left of the way to the steady state when the first dwell begins: 1 for a resonator at rest, exp(lambda t) after the
// lead-in t at the first frequency.
func (t timing) start(lambda complex128) (left, byLambda complex128) {
	left = expOf(complex(t.leadIn, 0) * lambda)
	return left, complex(t.leadIn, 0) * left
}

// stretchedBy returns the timing with all times multiplied.
func (t timing) stretchedBy(factor float64) timing {
	return timing{t.dwell * factor, t.averaging * factor, t.leadIn * factor}
}

func expOf(z complex128) complex128 {
	sin, cos := math.Sincos(imag(z))
	length := math.Exp(real(z))
	return complex(length*cos, length*sin)
}

// meanExp returns (exp(z) - 1)/z, the mean of exp over the way from 0 to z, and its derivative. exp is exp(z). Below |z| of 0.05 the difference
// would lose digits and the power series of either takes over, good to 1e-14.
func meanExp(z, exp complex128) (mean, slope complex128) {
	if math.Abs(real(z))+math.Abs(imag(z)) < 0.05 {
		mean = 1 + z*(1.0/2+z*(1.0/6+z*(1.0/24+z*(1.0/120+z*(1.0/720+z*(1.0/5040+z/40320))))))
		slope = 1.0/2 + z*(1.0/3+z*(1.0/8+z*(1.0/30+z*(1.0/144+z*(1.0/840+z*(1.0/5760+z/45360))))))
		return mean, slope
	}
	inverse := reciprocal(z)
	mean = (exp - 1) * inverse
	return mean, (exp - mean) * inverse
}

// reciprocal is 1/z without the care for extreme values that the language takes with a division.
func reciprocal(z complex128) complex128 {
	q := 1 / (real(z)*real(z) + imag(z)*imag(z))
	return complex(real(z)*q, -imag(z)*q)
}
