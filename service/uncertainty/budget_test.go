package uncertainty

import (
	"math"
	"testing"
)

// sample is a budget of two quantities with three sources.
func sample() *Budget {
	b := NewBudget(2)
	b.Add(Noise, Statistical, 40, []float64{4, 1, 1, 9})
	b.AddEffect(Drift, Systematic, 0, []float64{3, -2})
	b.AddIndependent(Contact, Statistical, 10, []float64{0, 6})
	return b
}

func equal(t *testing.T, what string, got []float64, want ...float64) {
	t.Helper()
	for i := range want {
		if math.Abs(got[i]-want[i]) > 1e-14*math.Abs(want[i]) {
			t.Errorf("%s: element %d is %g, want %g", what, i, got[i], want[i])
		}
	}
}

func TestBudgetAddsUp(t *testing.T) {
	b := sample()
	dst := make([]float64, 4)
	b.Covariance(dst)
	equal(t, "total", dst, 13, -5, -5, 49) // 4+9, 1−6, 9+4+36
	b.CovarianceOf(Statistical, dst)
	equal(t, "statistical", dst, 4, 1, 1, 45)
	b.CovarianceOf(Systematic, dst)
	equal(t, "systematic", dst, 9, -6, -6, 4)
	equal(t, "deviations", []float64{
		b.StandardUncertainty(0), b.StandardUncertainty(1), b.StandardUncertaintyOf(Systematic, 0), b.StandardUncertaintyOf(Statistical, 1),
	}, math.Sqrt(13), 7, 3, math.Sqrt(45))
	// u⁴/Σ(u_i⁴/ν_i) = 49²/(9²/40 + 36²/10), drift being known exactly
	equal(t, "freedom", []float64{b.EffectiveFreedom(1)}, 2401/(81.0/40+1296.0/10))
	if got := Correlation(dst, 2, 0, 1); got != -1 {
		t.Errorf("one cause moves both quantities, yet their correlation is %g", got)
	}
}

func TestBudgetJoinsEqualSources(t *testing.T) {
	b := sample()
	b.AddEffect(Drift, Systematic, 8, []float64{4, 0})
	b.AddEffect(Drift, Statistical, 8, []float64{1, 0}) // another kind is another source
	if n := len(b.Contributions()); n != 4 {
		t.Fatalf("%d contributions, want 4", n)
	}
	drift := b.Contributions()[1]
	equal(t, "drift", drift.Covariance, 25, -6, -6, 4)
	if drift.Source != Drift || drift.Kind != Systematic || drift.Freedom != 8 {
		t.Errorf("%+v", drift)
	}
}

// A budget carried through a function is the budget of its result: same sources, and the same total as carrying the total.
func TestBudgetThrough(t *testing.T) {
	b := sample()
	jacobian := []float64{1, 2, 0, -1, 3, 1}
	through := b.Through(jacobian, 3)
	total, carried, direct := make([]float64, 4), make([]float64, 9), make([]float64, 9)
	b.Covariance(total)
	Propagate(direct, jacobian, total, 3, 2)
	through.Covariance(carried)
	equal(t, "total", carried, direct...)
	if len(through.Contributions()) != 3 || through.Quantities() != 3 || through.Contributions()[1].Source != Drift {
		t.Errorf("%+v", through.Contributions())
	}
	equal(t, "drift of the sum", []float64{through.StandardUncertaintyOf(Systematic, 0)}, 1) // |3 − 2·2|
}

// Repeating averages out what is drawn anew, and nothing else.
func TestMeanOfAttempts(t *testing.T) {
	dst := make([]float64, 4)
	mean := Mean([]*Budget{sample(), sample(), sample(), sample()}, nil)
	mean.CovarianceOf(Statistical, dst)
	equal(t, "statistical of four", dst, 1, 0.25, 0.25, 45.0/4)
	mean.CovarianceOf(Systematic, dst)
	equal(t, "systematic of four", dst, 9, -6, -6, 4)

	// Weights, and a systematic source whose effect differs: never below the truth, here that of a common cause.
	other := NewBudget(2)
	other.AddEffect(Drift, Systematic, 0, []float64{-1, 5})
	mean = Mean([]*Budget{sample(), other}, []float64{0.75, 0.25})
	mean.CovarianceOf(Systematic, dst)
	true0, true1 := 0.75*3+0.25*-1, 0.75*-2+0.25*5
	for _, g := range [][]float64{{1, 0}, {0, 1}, {1, 1}, {1, -1}, {2, 3}} {
		truth := g[0]*true0 + g[1]*true1
		if got := Variance(g, dst); got < truth*truth {
			t.Errorf("direction %v: variance %g below the true %g", g, got, truth*truth)
		}
	}
	mean.CovarianceOf(Statistical, dst)
	equal(t, "weighted statistical", dst, 0.5625*4, 0.5625, 0.5625, 0.5625*45)
}

func TestMeanRefuses(t *testing.T) {
	a, b := sample(), NewBudget(3)
	for name, got := range map[string]*Budget{
		"nothing":                   Mean(nil, nil),
		"different quantities":      Mean([]*Budget{a, b}, nil),
		"weights of another number": Mean([]*Budget{a, a}, []float64{1}),
		"weights of another sum":    Mean([]*Budget{a, a}, []float64{0.5, 0.6}),
		"a negative weight":         Mean([]*Budget{a, a}, []float64{1.5, -0.5}),
		"a weight that is NaN":      Mean([]*Budget{a, a}, []float64{math.NaN(), 1}),
	} {
		if got != nil {
			t.Errorf("%s: %+v", name, got)
		}
	}
}

// What is handed in is copied.
func TestBudgetKeepsItsOwn(t *testing.T) {
	covariance := []float64{1, 0, 0, 1}
	b := NewBudget(2)
	b.Add(Noise, Statistical, 5, covariance)
	covariance[0] = 100
	mean := Mean([]*Budget{b}, nil)
	mean.Add(Noise, Statistical, 5, covariance)
	if got := b.StandardUncertainty(0); got != 1 {
		t.Errorf("the budget changed with what was handed in: %g", got)
	}
}
