package leastsquares

import (
	"math"
	"slices"
	"testing"
)

// Samples far off pull a plain fit and leave a weighted one alone.
func TestHuberResistsOutliers(t *testing.T) {
	const sigma = 0.002
	random := fixedRandom(20)
	m := newLorentzian(401, 4)
	m.fill(trueResonance, sigma, random)
	wild := 0
	for i := 0; i < len(m.sample); i += 2 {
		if random.Float64() < 0.02 {
			m.sample[i] += 0.4
			m.sample[i+1] -= 0.3
			wild++
		}
	}
	var w Workspace
	p := len(trueResonance)
	plain, robust := slices.Clone(crudeStart), slices.Clone(crudeStart)
	w.Fit(m, len(m.sample), plain, Options{})
	res := w.Fit(m, len(m.sample), robust, Options{ComplexPairs: true, HuberThreshold: 1.9 * sigma * math.Sqrt2})
	if res.Status != Converged || res.Outlying < wild || res.Outlying > wild+40 {
		t.Errorf("%d wild samples: %+v", wild, res)
	}
	worst := 0.0
	for k, want := range trueResonance {
		deviation := math.Sqrt(w.Covariance()[k*p+k] * res.ResidualVariance)
		if math.Abs(robust[k]-want) > 4*deviation {
			t.Errorf("parameter %d is %g ± %g, want %g", k, robust[k], deviation, want)
		}
		worst = max(worst, math.Abs(plain[k]-want)/deviation)
	}
	if worst < 10 {
		t.Errorf("the plain fit is within %.1f deviations: these outliers prove nothing", worst)
	}
}

// The claimed covariance of a weighted fit is its scatter, on clean noise and with a few outliers.
func TestHuberCovarianceIsTheScatter(t *testing.T) {
	const draws, sigma = 1500, 0.01
	for _, test := range []struct {
		name      string
		share     float64 // of samples with ten times the noise
		threshold float64 // in units of the rms length of a sample
		pairs     bool
	}{
		{"clean", 0, 1.9, true},
		{"low threshold", 0, 0.8, true},
		{"outliers", 0.03, 1.9, true},
		{"real residuals", 0.03, 1.0, false},
	} {
		random := fixedRandom(21)
		m := newLorentzian(101, 4)
		var w Workspace
		p := len(trueResonance)
		squares, claimed := make([]float64, p), make([]float64, p)
		for range draws {
			m.fill(trueResonance, sigma, random)
			for i := 0; i < len(m.sample); i += 2 {
				if random.Float64() < test.share {
					m.sample[i] += 10 * sigma * random.NormFloat64()
					m.sample[i+1] += 10 * sigma * random.NormFloat64()
				}
			}
			params := slices.Clone(trueResonance)
			res := w.Fit(m, len(m.sample), params, Options{ComplexPairs: test.pairs, HuberThreshold: test.threshold * sigma * math.Sqrt2})
			if res.Status != Converged {
				t.Fatalf("%+v", res)
			}
			for k := range p {
				d := params[k] - trueResonance[k]
				squares[k] += d * d
				claimed[k] += w.Covariance()[k*p+k] * res.ResidualVariance
			}
		}
		for k := range p {
			if ratio := math.Sqrt(squares[k] / claimed[k]); math.Abs(ratio-1) > 0.07 {
				t.Errorf("%s: parameter %d scatters by %.3f of what is claimed", test.name, k, ratio)
			}
		}
	}
}

// A complex sample is weighted by its length: turning the phase of all samples turns the result and changes nothing else.
func TestHuberIsIndependentOfPhase(t *testing.T) {
	m := newLorentzian(201, 4)
	m.fill(trueResonance, 0.01, fixedRandom(22))
	turned := newLorentzian(201, 4)
	for i := 0; i < len(m.sample); i += 2 { // a quarter turn is exact
		turned.sample[i], turned.sample[i+1] = -m.sample[i+1], m.sample[i]
	}
	options := Options{ComplexPairs: true, HuberThreshold: 0.012, Tolerance: 1e-10}
	var w Workspace
	a, b := slices.Clone(crudeStart), slices.Clone(crudeStart)
	first := w.Fit(m, len(m.sample), a, options)
	second := w.Fit(turned, len(m.sample), b, options)
	if first.Outlying < 20 || first.Outlying != second.Outlying || relative(first.Cost, second.Cost) > 1e-12 {
		t.Errorf("%+v\n%+v", first, second)
	}
	for k, want := range []float64{-a[1], a[0], a[2], a[3], -a[5], a[4]} {
		if math.Abs(b[k]-want) > 1e-9 {
			t.Errorf("parameter %d is %.12g, want %.12g", k, b[k], want)
		}
	}
	options.ComplexPairs = false
	third := w.Fit(m, len(m.sample), a, options)
	if third.Outlying == first.Outlying {
		t.Error("parts and pairs were weighted alike")
	}
}

// At the solution the gradient of Huber's loss vanishes, and the cost is that loss.
func TestHuberMinimisesItsLoss(t *testing.T) {
	m := newLorentzian(101, 4)
	m.fill(trueResonance, 0.02, fixedRandom(23))
	const threshold = 0.02
	for _, pairs := range []bool{true, false} {
		var w Workspace
		params := slices.Clone(crudeStart)
		res := w.Fit(m, len(m.sample), params, Options{ComplexPairs: pairs, HuberThreshold: threshold, Tolerance: 1e-9})
		loss := func(at []float64) float64 {
			r := make([]float64, len(m.sample))
			m.Evaluate(at, r, nil)
			var sum float64
			for i := 0; i < len(r); {
				length := math.Abs(r[i])
				if pairs {
					length = math.Hypot(r[i], r[i+1])
					i++
				}
				i++
				if length <= threshold {
					sum += length * length
				} else {
					sum += threshold * (2*length - threshold)
				}
			}
			return sum
		}
		least := loss(params)
		if res.Status != Converged || relative(res.Cost, least) > 1e-13 || res.Cost >= res.SumOfSquares {
			t.Errorf("loss %g: %+v", least, res)
		}
		for k := range params {
			for _, h := range []float64{-1e-4, 1e-4} {
				moved := slices.Clone(params)
				moved[k] += h
				if loss(moved) <= least {
					t.Errorf("pairs %v: moving parameter %d by %g lowers the loss", pairs, k, h)
				}
			}
		}
	}
}

// A threshold beyond every residual changes no bit.
func TestHuberHighThreshold(t *testing.T) {
	m := newLorentzian(101, 4)
	m.fill(trueResonance, 0.02, fixedRandom(24))
	var w Workspace
	plain, robust := slices.Clone(crudeStart), slices.Clone(crudeStart)
	w.Fit(m, len(m.sample), plain, Options{})
	res := w.Fit(m, len(m.sample), robust, Options{ComplexPairs: true, HuberThreshold: 100})
	if !slices.Equal(plain, robust) || res.Outlying != 0 {
		t.Errorf("%v and %v", plain, robust)
	}
}

// Response of a weighted fit is −(JᵀWJ)⁻¹JᵀW shift, W formed here from the residuals.
func TestHuberResponse(t *testing.T) {
	const threshold = 0.015
	m := newLorentzian(101, 4)
	m.fill(trueResonance, 0.01, fixedRandom(25))
	var w Workspace
	params := slices.Clone(crudeStart)
	res := w.Fit(m, len(m.sample), params, Options{ComplexPairs: true, HuberThreshold: threshold})
	if res.Outlying < 10 {
		t.Fatalf("%+v: these weights prove nothing", res)
	}
	n, p := len(m.sample), len(params)
	residual, jacobian := make([]float64, n), make([]float64, n*p)
	m.Evaluate(params, residual, jacobian)
	shift, got := make([]float64, n), make([]float64, p)
	for i := range shift {
		shift[i] = math.Cos(0.3 * float64(i))
	}
	w.Response(got, shift)
	pull := make([]float64, p) // JᵀW shift
	for i := range residual {
		weight := min(1, threshold/math.Hypot(residual[i&^1], residual[i|1]))
		for k := range pull {
			pull[k] += jacobian[k*n+i] * weight * shift[i]
		}
	}
	for k := range p {
		want := -dot(w.Covariance()[k*p:(k+1)*p], pull)
		if math.Abs(got[k]-want) > 1e-11*norm(got) {
			t.Errorf("response of parameter %d is %.12g, want %.12g", k, got[k], want)
		}
	}
}
