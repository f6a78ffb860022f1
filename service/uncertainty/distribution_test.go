package uncertainty

import (
	"math"
	"math/big"
	"testing"
)

// relative returns the relative error of got, +Inf where that is no number, so that NaN fails every comparison.
func relative(got, want float64) float64 {
	if e := math.Abs(got-want) / math.Abs(want); !math.IsNaN(e) {
		return e
	}
	return math.Inf(1)
}

const precision = 2400 // bits: Σ below grows to e^(z²/2) before 1 − it falls to e^(−z²/2)

// bigTail returns 1 − Φ(z) from Φ(z) = ½ + φ(z) Σ z^(2k+1)/(1·3·5 .. (2k+1)), summed in long arithmetic.
// Source: Abramowitz and Stegun, Handbook of Mathematical Functions (1964), 26.2.11.
func bigTail(z float64) float64 {
	f := func(x float64) *big.Float { return new(big.Float).SetPrec(precision).SetFloat64(x) }
	x := f(z)
	square := f(0).Mul(x, x)
	term, sum := f(0).Copy(x), f(0).Copy(x)
	for k := 1; k < 20000; k++ {
		term.Mul(term, square)
		term.Quo(term, f(float64(2*k+1)))
		sum.Add(sum, term)
		if term.MantExp(nil) < sum.MantExp(nil)-precision {
			break
		}
	}
	// φ(z) = e^(−z²/2)/√2π, e^−s by its series after halving s sixteen times.
	s := f(0).Quo(square, f(-2*65536))
	e, t := f(1), f(1)
	for k := 1; k < 400; k++ {
		t.Mul(t, s)
		t.Quo(t, f(float64(k)))
		e.Add(e, t)
	}
	for range 16 {
		e.Mul(e, e)
	}
	root := f(0).Sqrt(f(0).Mul(f(2), bigPi()))
	sum.Mul(sum, e.Quo(e, root))
	tail, _ := f(0).Sub(f(0.5), sum).Float64()
	return tail
}

// bigPi returns π by Machin's formula, 16 arctan(1/5) − 4 arctan(1/239).
func bigPi() *big.Float {
	arctan := func(n float64) *big.Float {
		f := func(x float64) *big.Float { return new(big.Float).SetPrec(precision).SetFloat64(x) }
		power := f(0).Quo(f(1), f(n))
		sum := f(0).Copy(power)
		for k := 1.0; power.MantExp(nil) > -precision; k++ {
			power.Quo(power, f(-n*n))
			sum.Add(sum, f(0).Quo(power, f(2*k+1)))
		}
		return sum
	}
	a, b := arctan(5), arctan(239)
	a.Mul(a, big.NewFloat(16))
	return a.Sub(a, b.Mul(b, big.NewFloat(4)))
}

// normalPoints lie all over the range of the tail.
var normalPoints = []float64{0, 1e-9, 0.1, 0.5, 0.67, 0.7, 1, 1.2815515655446, 1.6448536269515, 2, 2.5, 2.9, 3, 3.05, 4, 5, 6, 8, 10, 15, 20, 25, 30, 37}

func TestNormalAgainstLongArithmetic(t *testing.T) {
	if pi, _ := bigPi().Float64(); pi != math.Pi {
		t.Fatalf("long arithmetic is wrong: π = %v", pi)
	}
	for _, z := range normalPoints {
		want := bigTail(z)
		// z²/2 rounds to 1e-16 of itself, which the exponential turns into that much of the tail.
		tolerance := 5e-16 * (1 + z*z)
		if got := NormalTail(z); relative(got, want) > tolerance {
			t.Errorf("tail at %g is %.17g, want %.17g", z, got, want)
		}
		if got := NormalProbability(-z); relative(got, want) > tolerance {
			t.Errorf("Φ(−%g) is %.17g, want %.17g", z, got, want)
		}
		if got := NormalProbability(z); math.Abs(got-(1-want)) > 2e-16 {
			t.Errorf("Φ(%g) is %.17g, want %.17g", z, got, 1-want)
		}
		if got := -NormalQuantile(want); math.Abs(got-z) > 1e-15*max(z, 1) {
			t.Errorf("quantile of %g is %.17g, want %.17g", want, got, z)
		}
	}
}

func TestNormalQuantileEdges(t *testing.T) {
	for _, test := range []struct{ p, want float64 }{
		{0, math.Inf(-1)}, {1, math.Inf(1)}, {0.5, 0}, {-1, math.NaN()}, {1.5, math.NaN()}, {math.NaN(), math.NaN()},
	} {
		if got := NormalQuantile(test.p); got != test.want && !(math.IsNaN(got) && math.IsNaN(test.want)) {
			t.Errorf("quantile of %g is %g, want %g", test.p, got, test.want)
		}
	}
	// It rises without a step where one way of computing it hands over to another, and is odd about one half.
	last := math.Inf(-1)
	for _, centre := range []float64{0.25, 0.5, 0.75} {
		for i := -50; i <= 50; i++ {
			p := centre + float64(i)*1e-13
			z := NormalQuantile(p)
			if z < last {
				t.Errorf("quantile falls at %.17g", p)
			}
			last = z
			if z != -NormalQuantile(1-p) && math.Abs(z+NormalQuantile(1-p)) > 1e-15 {
				t.Errorf("quantile is not odd at %.17g", p)
			}
		}
	}
	for p := 1e-320; p > 0; p /= 2 { // down to the smallest number there is
		if z := NormalQuantile(p); z > -37 || z < -39 || math.IsNaN(z) {
			t.Errorf("quantile of %g is %g", p, z)
		}
	}
}

// integratedTail integrates the density of Student's t from t on, by the trapezoidal rule after the substitution
// x = t + exp(s − exp(−s)), which makes both ends vanish doubly exponentially.
// It also returns its own relative error, the rounding of the logarithms of the gamma function.
func integratedTail(t, freedom float64) (tail, relativeError float64) {
	high, _ := math.Lgamma((freedom + 1) / 2)
	low, _ := math.Lgamma(freedom / 2)
	constant := high - low - 0.5*math.Log(math.Pi*freedom)
	const h = 1.0 / 64
	var sum float64
	for k := -64 * 6; k <= 64*400; k++ {
		s := float64(k) * h
		e := math.Exp(-s)
		x := math.Exp(s - e)
		log := constant - (freedom+1)/2*math.Log1p((t+x)*(t+x)/freedom) + s - e
		if math.IsNaN(log) {
			break
		}
		sum += math.Exp(log) * (1 + e)
	}
	return sum * h, 4e-16 * math.Abs(high)
}

func TestStudentAgainstIntegral(t *testing.T) {
	for _, freedom := range []float64{0.7, 1, 2, 2.5, 3, 4, 7, 10, 16, 19.5, 20, 21, 50, 200, 1000} {
		for _, x := range []float64{0, 0.01, 0.3, 0.8, 1, 1.5, 1.8, 2, 2.5, 3, 5, 10, 30} {
			want, doubt := integratedTail(x, freedom)
			// Both sides lose digits as the logarithm of the tail grows.
			tolerance := 1e-13*(1-math.Log(want)) + doubt
			got := StudentTail(x, freedom)
			if relative(got, want) > tolerance {
				t.Errorf("ν %g: tail at %g is %.15g, integral %.15g", freedom, x, got, want)
			}
			if sum := got + StudentProbability(x, freedom); math.Abs(sum-1) > 1e-15 {
				t.Errorf("ν %g: tail and probability at %g add up to %.17g", freedom, x, sum)
			}
			if x > 0 {
				if back := -StudentQuantile(got, freedom); relative(back, x) > 1e-12 {
					t.Errorf("ν %g: quantile of the tail at %g is %.15g", freedom, x, back)
				}
			}
		}
	}
}

// Closed forms: ν = 1 is the arctangent, ν = 2 and 4 are algebraic. Source: Abramowitz and Stegun (1964), 26.7.3 and 26.7.4.
func TestStudentClosedForms(t *testing.T) {
	for _, p := range []float64{1e-300, 1e-100, 1e-20, 1e-6, 0.005, 0.025, 0.1, 0.2499, 0.2501, 0.4, 0.49, 0.4999999} {
		if got, want := StudentQuantile(p, 1), -1/math.Tan(math.Pi*p); relative(got, want) > 1e-13 {
			t.Errorf("ν 1: quantile of %g is %.16g, want %.16g", p, got, want)
		}
		if got, want := StudentQuantile(p, 2), (2*p-1)/math.Sqrt(2*p*(1-p)); relative(got, want) > 1e-13 {
			t.Errorf("ν 2: quantile of %g is %.16g, want %.16g", p, got, want)
		}
		root := math.Sqrt(4 * p * (1 - p))
		if got, want := StudentQuantile(p, 4), -2*math.Sqrt(math.Cos(math.Acos(root)/3)/root-1); p > 1e-20 && p < 0.4999 && relative(got, want) > 2e-13/(0.5-p) {
			t.Errorf("ν 4: quantile of %g is %.16g, want %.16g", p, got, want)
		}
	}
}

// Student's distribution goes over into the normal one: at the join of two methods, and at infinity.
func TestStudentAtManyDegreesOfFreedom(t *testing.T) {
	for _, x := range []float64{0.1, 0.5, 1, 1.7, 1.8, 2, 3, 6} {
		below, above := StudentTail(x, math.Nextafter(expansionFreedom, 0)), StudentTail(x, expansionFreedom)
		tolerance := 1e-13
		if x > 2 {
			tolerance = 2e-12
		}
		if relative(below, above) > tolerance {
			t.Errorf("tail at %g: %.15g by the fraction, %.15g by the expansion", x, below, above)
		}
		below, above = StudentQuantile(NormalTail(x), math.Nextafter(expansionFreedom, 0)), StudentQuantile(NormalTail(x), expansionFreedom)
		if relative(below, above) > 1e-12 {
			t.Errorf("quantile at %g: %.15g by the fraction, %.15g by the expansion", x, below, above)
		}
		if got := StudentTail(x, math.Inf(1)); got != NormalTail(x) {
			t.Errorf("tail at %g with infinite freedom is %g", x, got)
		}
	}
	if got := StudentQuantile(0.975, math.Inf(1)); got != NormalQuantile(0.975) {
		t.Errorf("quantile with infinite freedom is %g", got)
	}
}

// The factors that JCGM 100:2008 prints in H.1 and G.4.1 (as quoted in testdata/worked_examples.csv), and truncation.
func TestCoverageFactor(t *testing.T) {
	if got := CoverageFactor(0.95, 19); math.Abs(got-2.09) > 0.005 {
		t.Errorf("k95 for 19 degrees of freedom is %.4f, want 2.09", got)
	}
	if got, want := CoverageFactor(0.95, 16.99), CoverageFactor(0.95, 16); got != want {
		t.Errorf("16.99 degrees of freedom were not truncated: %g", got)
	}
	if got, want := CoverageFactor(0.95, 0.3), CoverageFactor(0.95, 1); got != want {
		t.Errorf("less than one degree of freedom gives %g", got)
	}
	if got, want := CoverageFactor(1-0x1p-53, math.Inf(1)), -NormalQuantile(0x1p-54); got != want {
		t.Errorf("k for all but 1e-16 is %g, want %g", got, want)
	}
	for _, bad := range []float64{CoverageFactor(0, 5), CoverageFactor(1, 5), CoverageFactor(0.95, 0)} {
		if !math.IsNaN(bad) {
			t.Errorf("%g, want NaN", bad)
		}
	}
}

func TestStudentEdges(t *testing.T) {
	inf := math.Inf(1)
	for _, test := range []struct{ got, want float64 }{
		{StudentQuantile(0, 5), -inf}, {StudentQuantile(1, 5), inf}, {StudentQuantile(0.5, 5), 0}, {StudentTail(inf, 3), 0},
		{StudentTail(-inf, 3), 1}, {StudentTail(0, 3), 0.5},
	} {
		if test.got != test.want {
			t.Errorf("%g, want %g", test.got, test.want)
		}
	}
	for _, got := range []float64{StudentQuantile(0.9, 0), StudentQuantile(-0.1, 5), StudentQuantile(2, 5), StudentTail(1, -1)} {
		if !math.IsNaN(got) {
			t.Errorf("%g, want NaN", got)
		}
	}
	if got := StudentTail(1e200, 1); relative(got, 1e-200/math.Pi) > 1e-13 {
		t.Errorf("tail of ν 1 at 1e200 is %g", got)
	}
}
