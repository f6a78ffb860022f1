package bound

import "math"

// A magnitude |T + n| is Rice distributed. With u = |T|/s and v = |T + n|/s, s being the deviation of one part of the noise,
//
//	density    v exp(-(u^2 + v^2)/2) I0(u v)
//	score      d ln density/du = v I1(u v)/I0(u v) - u
//
// and the information about u is the mean square of the score: 1 far above the noise, u^2 far below it.
// Source: S. O. Rice, Mathematical analysis of random noise, Bell System Technical Journal 24 (1945) 46, section 3.10.

// riceInformation returns the information about u, to 1e-5: by Simpson's rule on the density, and 1 - 1/(2 u^2) for large u.
func riceInformation(u float64) float64 {
	const asymptotic = 25
	if u > asymptotic {
		return 1 - 1/(2*u*u)
	}
	low, high := math.Max(0, u-9), u+9
	const panels = 240
	h := (high - low) / panels
	var sum float64
	for k := range panels + 1 {
		v := low + h*float64(k)
		if v == 0 {
			continue
		}
		weight := 2.0
		switch {
		case k == 0 || k == panels:
			weight = 1
		case k%2 == 1:
			weight = 4
		}
		score := v*besselRatio(u*v) - u
		sum += weight * v * math.Exp(-(u-v)*(u-v)/2) * scaledBessel(u*v) * score * score
	}
	return sum * h / 3
}

// scaledBessel returns I0(x) exp(-x) = (1/pi) integral over 0..pi of exp(x (cos a - 1)), by the trapezium rule, which converges faster than
// any power for a periodic integrand.
func scaledBessel(x float64) float64 {
	n := 16 + 4*int(math.Sqrt(x)) // the integrand is as narrow as 1/sqrt(x)
	sum := 0.5 * (1 + math.Exp(-2*x))
	for k := 1; k < n; k++ {
		sum += math.Exp(x * (math.Cos(math.Pi*float64(k)/float64(n)) - 1))
	}
	return sum / float64(n)
}

// besselRatio returns I1(x)/I0(x) for x of at least 0: Gauss' continued fraction 1/(2/x + 1/(4/x + 1/(6/x + ...))), and for large x
//
//	1 - 1/(2x) - 1/(8x^2) - 1/(8x^3) - 25/(128x^4) - 13/(32x^5)
//
// Accuracy 1e-11. Source: Abramowitz and Stegun, Handbook of Mathematical Functions (1964), 9.1.73 and 9.7.1.
func besselRatio(x float64) float64 {
	const asymptotic = 100
	if x == 0 {
		return 0
	}
	y := 1 / x
	if x > asymptotic {
		return 1 - y*(1.0/2+y*(1.0/8+y*(1.0/8+y*(25.0/128+y*13.0/32))))
	}
	ratio := 0.0
	for k := 20 + int(x); k > 0; k-- {
		ratio = 1 / (2*float64(k)*y + ratio)
	}
	return ratio
}
