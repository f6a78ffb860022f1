package uncertainty

import "math"

// expansionFreedom is the number of degrees of freedom from which on Student's distribution is taken from its expansion around the
// normal one; the continued fraction would need some √ν terms.
const expansionFreedom = 2e4

// StudentTail returns the probability that Student's t with freedom ν > 0 degrees of freedom exceeds t.
//
//	½ I_x(ν/2, ½), x = ν/(ν + t²), for t ≥ 0
//
// with I the regularised incomplete beta function. The tail keeps its relative accuracy, about 1e-13 up to ν = 1000 and 1e-12
// beyond (above ν = 2e4 as long as |t| ≤ 10). ν = +Inf is the normal distribution; NaN for ν ≤ 0. Source: Abramowitz and Stegun, Handbook of Mathematical Functions (1964), 26.7.1.
func StudentTail(t, freedom float64) float64 {
	switch {
	case !(freedom > 0) || math.IsNaN(t):
		return math.NaN()
	case math.IsInf(freedom, 1):
		return NormalTail(t)
	case t < 0:
		return 1 - StudentTail(-t, freedom)
	case math.IsInf(t, 1):
		return 0
	case freedom >= expansionFreedom:
		return NormalTail(normalOfStudent(t, freedom))
	}
	// x and 1 − x are both formed without cancelling.
	q := t / math.Sqrt(freedom)
	x, rest := 1/(1+q*q), q*q/(1+q*q)
	if q > 1e150 { // q² would overflow, and the first term of the tail is all there is: ½ x^(ν/2) / (a B(a, ½))
		log := gammaHalfStep(freedom/2) - 0.5*math.Log(math.Pi) - freedom*math.Log(q)
		return math.Exp(log) / freedom
	}
	if rest >= crossing(freedom) {
		return 0.5 * betaShare(freedom/2, x, rest, false)
	}
	return 0.5 - 0.5*betaShare(freedom/2, rest, x, true)
}

// StudentProbability returns the probability that Student's t is below t.
func StudentProbability(t, freedom float64) float64 { return StudentTail(-t, freedom) }

// StudentQuantile returns t with StudentProbability(t, ν) = p: −Inf at p = 0, +Inf at 1, NaN for p outside 0..1 or ν ≤ 0. ν need not
// be whole. Accuracy about 1e-13 of t, and of 1 − p where p is near 1.
func StudentQuantile(p, freedom float64) float64 {
	switch {
	case !(p >= 0 && p <= 1) || !(freedom > 0):
		return math.NaN()
	case math.IsInf(freedom, 1):
		return NormalQuantile(p)
	case p == 0:
		return math.Inf(-1)
	case p == 1:
		return math.Inf(1)
	case p > 0.5:
		return upperStudent(1-p, freedom)
	case p == 0.5:
		return 0
	}
	return -upperStudent(p, freedom)
}

// upperStudent returns t > 0 with the probability q < ½ above it.
func upperStudent(q, freedom float64) float64 {
	z := -NormalQuantile(q)
	if freedom >= expansionFreedom {
		return studentOfNormal(z, freedom)
	}
	if freedom == 1 {
		return 1 / math.Tan(math.Pi*q)
	}
	// Near the middle the probability between −t and t is what is known well, in the tail that beyond t.
	central := q > 0.25
	excess := func(t float64) float64 {
		if central {
			return (1 - 2*q) - studentCentre(t, freedom)
		}
		return math.Log(StudentTail(t, freedom) / q)
	}
	// Both forms of the excess fall with t. A bracket, and Newton steps kept inside it.
	low, high := 0.0, max(z, 1)
	for high < math.MaxFloat64/4 && excess(high) > 0 {
		low, high = high, 2*high
	}
	t := min(max(studentOfNormal(z, freedom), low), high)
	for range 200 {
		e := excess(t)
		if e > 0 {
			low = t
		} else {
			high = t
		}
		slope := 2 * studentDensity(t, freedom)
		if !central {
			slope = studentDensity(t, freedom) / StudentTail(t, freedom)
		}
		next := t + e/slope
		if !(next > low && next < high) {
			next = low + (high-low)/2
		}
		if math.Abs(next-t) <= 1e-15*t || high-low <= 2e-16*high {
			return next
		}
		t = next
	}
	return t
}

// crossing returns the value of t²/(ν + t²) from which on the tail is computed directly, and below which the centre is. The
// continued fraction of DLMF 8.17.22 wants 1.5/(ν/2 + 2.5); for many degrees of freedom twice that costs the tail one digit by
// subtraction and saves two that the many terms of the other side would lose.
func crossing(freedom float64) float64 {
	if freedom > 100 {
		return 3 / (freedom/2 + 2.5)
	}
	return 1.5 / (freedom/2 + 2.5)
}

// studentCentre returns the probability between −t and t, accurate for small t.
func studentCentre(t, freedom float64) float64 {
	q := t / math.Sqrt(freedom)
	x, rest := 1/(1+q*q), q*q/(1+q*q)
	if rest < crossing(freedom) {
		return betaShare(freedom/2, rest, x, true)
	}
	return 1 - betaShare(freedom/2, x, rest, false)
}

// studentDensity returns the density of Student's t.
func studentDensity(t, freedom float64) float64 {
	q := t / math.Sqrt(freedom)
	return math.Exp(gammaHalfStep(freedom/2)-(freedom+1)/2*math.Log1p(q*q)) / math.Sqrt(freedom*math.Pi)
}

// studentOfNormal returns the t that has the same tail as the normal z, by the expansion in 1/ν to its fourth power. With ν ≥ 2e4
// the terms left out are below 1e-16 of t for |z| ≤ 8 and below 1e-8 for |z| ≤ 37. Source: Abramowitz and Stegun (1964), 26.7.5.
func studentOfNormal(z, freedom float64) float64 {
	s, v := z*z, 1/freedom
	first := (s + 1) / 4
	second := ((5*s+16)*s + 3) / 96
	third := (((3*s+19)*s+17)*s - 15) / 384
	fourth := ((((79*s+776)*s+1482)*s-1920)*s - 945) / 92160
	return z * (1 + v*(first+v*(second+v*(third+v*fourth))))
}

// normalOfStudent undoes studentOfNormal.
func normalOfStudent(t, freedom float64) float64 {
	z := t
	for range 4 { // each turn gains the factor 1/ν
		z = t / (studentOfNormal(z, freedom) / max(z, math.SmallestNonzeroFloat64))
		if !(z > 0) {
			return t
		}
	}
	return z
}

// betaShare returns the regularised incomplete beta function I_x(a, ½), or I_x(½, a) when swapped, with rest = 1 − x given apart
// so that neither loses digits. x must be on the side where the continued fraction converges fast, see crossing.
// Source: DLMF 8.17.22, evaluated by Lentz's method; the factor before it from DLMF 8.17.22 and 5.12.1.
func betaShare(a, x, rest float64, swapped bool) float64 {
	if x <= 0 {
		return 0
	}
	// x^a rest^b / B(a, b), with B(a, ½) = √π Γ(a)/Γ(a+½)
	b := 0.5
	log := gammaHalfStep(a) - 0.5*math.Log(math.Pi)
	if swapped {
		log += 0.5*math.Log(x) + a*log1mOf(x, rest)
		a, b = b, a
	} else {
		log += a*log1mOf(rest, x) + 0.5*math.Log(rest)
	}
	const tiny = 1e-300
	c, d := 1.0, 1/(1-(a+b)*x/(a+1))
	f := d
	for m := 1.0; m < 20000; m++ {
		even := m * (b - m) * x / ((a + 2*m - 1) * (a + 2*m))
		d = 1 / away(1+even*d, tiny)
		c = away(1+even/c, tiny)
		f *= c * d
		odd := -(a + m) * (a + b + m) * x / ((a + 2*m) * (a + 2*m + 1))
		d = 1 / away(1+odd*d, tiny)
		c = away(1+odd/c, tiny)
		f *= c * d
		if math.Abs(c*d-1) < 2e-16 {
			break
		}
	}
	return math.Exp(log) * f / a
}

// log1mOf returns ln(rest) with rest = 1 − x, from whichever of the two is the more accurate argument.
func log1mOf(x, rest float64) float64 {
	if x < 0.5 {
		return math.Log1p(-x)
	}
	return math.Log(rest)
}

// away keeps a denominator of the continued fraction from zero.
func away(x, least float64) float64 {
	if math.Abs(x) < least {
		return least
	}
	return x
}

// gammaHalfStep returns ln Γ(a+½) − ln Γ(a) for a > 0. For large a the two logarithms agree in most digits, and the expansion of
// their difference is used. Source: DLMF 5.11.13 with the coefficients of 5.11.15 worked out for a step of ½; error below 1e-15 from
// a = 10.
func gammaHalfStep(a float64) float64 {
	if a < 10 {
		high, _ := math.Lgamma(a + 0.5)
		low, _ := math.Lgamma(a)
		return high - low
	}
	v := 1 / a
	s := v * v
	return 0.5*math.Log(a) - v*(1.0/8-s*(1.0/192-s*(1.0/640-s*(17.0/14336-s*(31.0/18432-s*691.0/180224)))))
}
