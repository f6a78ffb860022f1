package resonance

import "math"

// besselLimit is where the power series hands over to the asymptotic one: at 16 either is good to 1e-13.
const besselLimit = 16.0

// bessel returns ln(I0(x) exp(-x)) and I1(x)/I0(x) for x of at least 0, with I0 and I1 the modified Bessel functions of the first kind:
//
//	I0 = sum (x/2)^2k/k!^2,    I1 = (x/2) sum (x/2)^2k/(k! (k+1)!)
//
// and for large x exp(x)/sqrt(2 pi x) times 1 + 1/(8x) + 9/(2 (8x)^2) + ... and 1 - 3/(8x) - 15/(2 (8x)^2) - ...
// Source: Abramowitz and Stegun, Handbook of Mathematical Functions (1964), 9.6.10 and 9.7.1.
func bessel(x float64) (logScaled, ratio float64) {
	if x < besselLimit {
		quarter := x * x / 4
		term, zero, one := 1.0, 1.0, 1.0
		for k := 1.0; term > 1e-17*zero; k++ {
			term *= quarter / (k * k)
			zero += term
			one += term / (k + 1)
		}
		return math.Log(zero) - x, x / 2 * one / zero
	}
	eighth := 1 / (8 * x)
	zero, one := 1.0, 1.0
	termZero, termOne := 1.0, 1.0
	for k := 1.0; k < 30; k++ {
		odd := (2*k - 1) * (2*k - 1)
		termZero *= odd * eighth / k
		termOne *= (odd - 4) * eighth / k
		zero += termZero
		one += termOne
		if termZero < 1e-16 {
			break
		}
	}
	return math.Log(zero) - 0.5*math.Log(2*math.Pi*x), one / zero
}
