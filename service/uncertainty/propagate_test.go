package uncertainty

import (
	"math"
	"math/rand/v2"
	"testing"
)

func TestPropagateByHand(t *testing.T) {
	// y = (x1 + x2, x1 − x2, 2 x2) with variances 4 and 1 and covariance 1.
	covariance := []float64{4, 1, 1, 1}
	jacobian := []float64{1, 1, 1, -1, 0, 2}
	want := []float64{7, 3, 4, 3, 3, 0, 4, 0, 4}
	dst := make([]float64, 9)
	Propagate(dst, jacobian, covariance, 3, 2)
	for i := range want {
		if dst[i] != want[i] {
			t.Errorf("element %d is %g, want %g", i, dst[i], want[i])
		}
	}
	if got := Variance(jacobian[:2], covariance); got != 7 {
		t.Errorf("variance %g, want 7", got)
	}
}

// An unknown quantity spoils only what depends on it.
func TestPropagateUnknown(t *testing.T) {
	inf := math.Inf(1)
	covariance := []float64{1, 0, 0, inf}
	dst := make([]float64, 9)
	Propagate(dst, []float64{2, 0, 1, 1, 0, -3}, covariance, 3, 2)
	want := []float64{4, 2, 0, 2, inf, 0, 0, 0, inf}
	for i := range want {
		if dst[i] != want[i] {
			t.Errorf("element %d is %g, want %g", i, dst[i], want[i])
		}
	}
	if got := Correlation(dst, 3, 0, 1); got != 0 {
		t.Errorf("correlation with an unknown quantity is %g", got)
	}
}

// Perfect correlation can cancel; rounding must not make the variance negative.
func TestVarianceThatCancels(t *testing.T) {
	random := rand.New(rand.NewPCG(1, 2))
	for range 1000 {
		a, b := random.NormFloat64(), random.NormFloat64()
		covariance := []float64{a * a, a * b, a * b, b * b}
		if got := Variance([]float64{b, -a}, covariance); !(got >= 0) || got > 1e-14*(1+a*a*b*b) {
			t.Errorf("variance %g", got)
		}
		dst := make([]float64, 1)
		Propagate(dst, []float64{b, -a}, covariance, 1, 2)
		if !(dst[0] >= 0) {
			t.Errorf("variance %g", dst[0])
		}
	}
}

func TestGradient(t *testing.T) {
	calls := 0
	f := func(x []float64) (float64, bool) {
		calls++
		return x[0]*x[0]*x[1] + math.Sin(x[2]) + 7*(x[3]-1e7), true
	}
	at := []float64{3, 2, 0.5, 1e7}
	before := append([]float64(nil), at...)
	dst := make([]float64, 4)
	if !Gradient(f, at, []float64{1e-3, 0.1, 1e-4, 1e-12}, dst) {
		t.Fatal("no gradient")
	}
	for k, want := range []float64{12, 9, math.Cos(0.5), 7} {
		// The last step is too small for 1e7 and is lengthened: without that the quotient would be rounding.
		if relative(dst[k], want) > 1e-6 {
			t.Errorf("derivative %d is %.12g, want %.12g", k, dst[k], want)
		}
	}
	for k := range at {
		if at[k] != before[k] {
			t.Errorf("component %d of the point was left changed", k)
		}
	}
	if calls != 8 {
		t.Errorf("%d evaluations, want 8", calls)
	}
}

// Where f bends within the uncertainty, half the change over ±u counts (JCGM 100:2008, 5.1.3 note 2), not the slope in the middle.
func TestGradientSpansTheUncertainty(t *testing.T) {
	f := func(x []float64) (float64, bool) { return x[0] * x[0] * x[0], true }
	dst := make([]float64, 1)
	if !Gradient(f, []float64{0}, []float64{2}, dst) || dst[0] != 4 {
		t.Errorf("%v, want (8 − −8)/4", dst)
	}
}

func TestGradientEdges(t *testing.T) {
	root := func(x []float64) (float64, bool) { return math.Sqrt(x[0]), x[0] >= 0 }
	blank := func(x []float64) (float64, bool) { return math.NaN(), true }
	pole := func(x []float64) (float64, bool) { return 1 / (x[0] - 1), true }
	tests := []struct {
		name     string
		f        func([]float64) (float64, bool)
		at, step float64
		ok       bool
		want     float64
	}{
		{"inside the domain", root, 4, 1e-3, true, 0.25},
		{"step leaves the domain", root, 0.1, 0.2, false, 0},
		{"value is NaN", blank, 1, 0.1, false, 0},
		{"a pole within the step", pole, 0, 1, false, 0},
		{"an exact quantity", root, 4, 0, true, 0},
		{"a negative step is a length", root, 4, -1e-3, true, 0.25},
		{"an infinite step", root, 4, math.Inf(1), false, 0},
	}
	for _, test := range tests {
		at, dst := []float64{test.at}, []float64{99}
		ok := Gradient(test.f, at, []float64{test.step}, dst)
		if ok != test.ok || ok && math.Abs(dst[0]-test.want) > 1e-7 {
			t.Errorf("%s: %v %v, want %v %v", test.name, dst[0], ok, test.want, test.ok)
		}
		if at[0] != test.at {
			t.Errorf("%s: the point was left at %g", test.name, at[0])
		}
	}
}

// Propagation of a bent function agrees with drawing from the distribution.
func TestPropagationAgainstDraws(t *testing.T) {
	f := func(x []float64) (float64, bool) { return x[0] / x[1], true }
	at, covariance := []float64{10, 5}, []float64{0.01, 0.006, 0.006, 0.0144} // correlation 0.5
	gradient := make([]float64, 2)
	if !Gradient(f, at, []float64{0.1, 0.12}, gradient) {
		t.Fatal("no gradient")
	}
	u := math.Sqrt(Variance(gradient, covariance))
	random := rand.New(rand.NewPCG(3, 4))
	const draws = 200000
	var sum, squares float64
	for range draws {
		a, b := random.NormFloat64(), random.NormFloat64()
		y, _ := f([]float64{10 + 0.1*a, 5 + 0.12*(0.5*a+math.Sqrt(0.75)*b)})
		sum += y
		squares += y * y
	}
	scatter := math.Sqrt(squares/draws - sum/draws*sum/draws)
	// 200 000 draws know a standard deviation to 0.16 %; the second order of the quotient is 0.1 %.
	if relative(u, scatter) > 0.01 {
		t.Errorf("propagated %g, drawn %g", u, scatter)
	}
}

func TestMeanCovarianceOfTooFew(t *testing.T) {
	mean, covariance := make([]float64, 2), make([]float64, 4)
	freedom := MeanCovariance(mean, covariance, [][]float64{{3}, {4}})
	if mean[0] != 3 || mean[1] != 4 || !math.IsInf(covariance[0], 1) || !math.IsInf(covariance[3], 1) || covariance[1] != 0 || freedom != 0 {
		t.Errorf("mean %v, covariance %v, freedom %g", mean, covariance, freedom)
	}
}

func TestRootSumSquares(t *testing.T) {
	for _, test := range []struct {
		u    []float64
		want float64
	}{{nil, 0}, {[]float64{3, 4, 12}, 13}, {[]float64{3e200, -4e200}, 5e200}, {[]float64{1, math.Inf(1)}, math.Inf(1)}} {
		if got := RootSumSquares(test.u...); math.Abs(got-test.want) > 1e-15*test.want {
			t.Errorf("%v: %g, want %g", test.u, got, test.want)
		}
	}
}

func TestEffectiveFreedomEdges(t *testing.T) {
	inf := math.Inf(1)
	for _, test := range []struct {
		name       string
		components []Component
		want       float64
	}{
		{"none", nil, inf},
		{"all exact", []Component{{1, inf}, {2, 0}}, inf},
		{"one", []Component{{3, 7}}, 7},
		{"no uncertainty at all", []Component{{0, 7}}, inf},
		{"equal parts add up", []Component{{1, 5}, {1, 5}}, 10},
		{"an exact part dilutes", []Component{{1, 5}, {1, inf}}, 20},
		{"small units", []Component{{1e-200, 5}, {1e-200, 5}}, 10},
	} {
		if got := EffectiveFreedom(test.components...); got != test.want && relative(got, test.want) > 1e-14 {
			t.Errorf("%s: %g, want %g", test.name, got, test.want)
		}
	}
	if got := TruncatedFreedom(inf); !math.IsInf(got, 1) {
		t.Errorf("truncated infinity is %g", got)
	}
}

func TestNoAllocation(t *testing.T) {
	f := func(x []float64) (float64, bool) { return x[0] * x[1], true }
	at, steps, gradient := []float64{1, 2}, []float64{0.1, 0.1}, make([]float64, 2)
	covariance, dst := []float64{1, 0.5, 0.5, 1}, make([]float64, 4)
	got := testing.AllocsPerRun(100, func() {
		Gradient(f, at, steps, gradient)
		Variance(gradient, covariance)
		Propagate(dst, []float64{1, 2, 3, 4}, covariance, 2, 2)
		Conformance(1, 2, 0, 3)
		Expand(1, 7, 0.95)
	})
	if got != 0 {
		t.Errorf("%g allocations", got)
	}
}

func BenchmarkConformance(b *testing.B) {
	var sum float64
	for b.Loop() {
		sum += Conformance(8, 1, -10, 10)
	}
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "conformances/s")
}

func BenchmarkQuantiles(b *testing.B) {
	b.Run("normal", func(b *testing.B) {
		for b.Loop() {
			NormalQuantile(0.025)
		}
		b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "quantiles/s")
	})
	b.Run("student/freedom=16", func(b *testing.B) {
		for b.Loop() {
			StudentQuantile(0.025, 16)
		}
		b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "quantiles/s")
	})
}
