package trial

import (
	"math"
	"math/rand/v2"
	"runtime"
	"slices"
	"strings"
	"testing"
)

// draw makes readings of an estimator with a bias and a spread, relative to a bound of 2, whose error follows the efficient one.
func draw(n int, bias, ratio, stated float64, efficient bool) []Reading {
	rng := rand.New(rand.NewPCG(1, 2))
	out := make([]Reading, n)
	for i := range out {
		e := 2 * rng.NormFloat64()
		out[i] = Reading{Error: 2*bias + ratio*e + 0.1*rng.NormFloat64(), Deviation: 2 * stated}
		if efficient {
			out[i].Efficient = e
		}
	}
	return out
}

func TestSpread(t *testing.T) {
	for _, c := range []struct {
		name                string
		bias, ratio, stated float64
		fault               string
	}{
		{"efficient", 0, 1, 1, ""},
		{"biased", 0.3, 1, 1, "bias"},
		{"spread", 0, 1.2, 1.2, "sd/bound"},
		{"too good", 0, 0.85, 0.85, "sd/bound"},
		{"overconfident", 0, 1, 0.8, "covers"},
		{"timid", 0, 1, 1.3, "covers"},
	} {
		for _, efficient := range []bool{true, false} {
			s := SpreadOf(draw(4000, c.bias, c.ratio, c.stated, efficient), 2)
			within := 0.04
			if efficient {
				within = 0.01
			}
			if want := math.Hypot(c.ratio, 0.05); math.Abs(s.Ratio-want) > within || math.Abs(s.Bias-c.bias) > 1.5*within {
				t.Errorf("%s, control variate %v: sd/bound %.3f, bias %+.3f, want %.3f, %+.3f", c.name, efficient, s.Ratio, s.Bias, want, c.bias)
			}
			if fault := Quick.Check(s); (fault == "") != (c.fault == "") || !strings.Contains(fault, c.fault) {
				t.Errorf("%s, control variate %v: gate says %q, want something of %q", c.name, efficient, fault, c.fault)
			}
		}
	}
}

// TestControlVariate: with it a spread of few trials is as sharp as one of many without.
func TestControlVariate(t *testing.T) {
	s := SpreadOf(draw(200, 0, 1, 1, true), 2)
	if math.Abs(s.Ratio-1) > 0.02 || math.Abs(s.PlainRatio-1) < 1e-3 {
		t.Errorf("sd/bound %.4f with and %.4f without, want 1 within 0.02 and some scatter", s.Ratio, s.PlainRatio)
	}
}

// TestRepeatIsReproducible: the outcomes follow from seed, cell and trial, whatever the number of cores.
func TestRepeatIsReproducible(t *testing.T) {
	run := func(seed uint64, cell string) []uint64 {
		return Repeat(seed, cell, 50, func() func(*rand.Rand) uint64 { return func(rng *rand.Rand) uint64 { return rng.Uint64() } })
	}
	many := run(7, "a")
	before := runtime.GOMAXPROCS(1)
	one := run(7, "a")
	runtime.GOMAXPROCS(before)
	if !slices.Equal(many, one) {
		t.Error("one core draws other numbers than several")
	}
	if slices.Equal(many, run(8, "a")) || slices.Equal(many, run(7, "b")) || many[0] == many[1] {
		t.Error("another seed, cell or trial draws the same numbers")
	}
}

func TestQuantile(t *testing.T) {
	v := []float64{5, 1, 4, 2, 3}
	for share, want := range map[float64]float64{0: 1, 0.5: 3, 1: 5} {
		if got := Quantile(v, share); got != want {
			t.Errorf("quantile %g is %g, want %g", share, got, want)
		}
	}
	if !math.IsNaN(Quantile(nil, 0.5)) {
		t.Error("the median of nothing is a number")
	}
}

func TestReport(t *testing.T) {
	var out strings.Builder
	r := NewReport(&out)
	table := r.Table("Title", "a", "bb")
	table.Row("x", 1.23456)
	r.Fail("broken by %d", 3)
	table.Close()
	for _, want := range []string{"Title\n", "a  bb\n", "x  1.23\n", "FAIL broken by 3\n"} {
		if !strings.Contains(out.String(), want) {
			t.Errorf("%q is not in %q", want, out.String())
		}
	}
	if f := r.Failures(); len(f) != 1 || f[0] != "broken by 3" {
		t.Errorf("failures %q", f)
	}
}
