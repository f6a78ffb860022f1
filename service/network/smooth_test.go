package network

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"sync"
	"testing"

	"example.com/admit/service/sweep"
	"pgregory.net/rapid"
)

// curve reads a function on n points, with noise.
func curve(n int, rms float64, random *rand.Rand, of func(x float64) complex128) (hz []float64, values []complex128) {
	for i := range n {
		x := -1 + 2*float64(i)/float64(n-1)
		hz = append(hz, 25e6+1e5*x)
		values = append(values, of(x)+complex(rms/math.Sqrt2*random.NormFloat64(), rms/math.Sqrt2*random.NormFloat64()))
	}
	return hz, values
}

// TestWhatIsSmoothed holds the rule of smooth.go against traces of which it is known what they are.
func TestWhatIsSmoothed(t *testing.T) {
	bend := func(x float64) complex128 { return complex(1+0.1*x-0.05*x*x, 0.2*x*x*x) }
	hidden := func(x float64) complex128 { return complex(1+0.1*x-0.05*x*x, 6.6e-5*x*x*x) } // a third degree of 2 sigma
	ripple := func(x float64) complex128 { return 1 + complex(0.01*math.Sin(60*x), 0) }
	for _, test := range []struct {
		name   string
		points int
		rms    float64
		stated float64
		of     func(float64) complex128
		smooth bool
		high   float64 // acceptable ratio of actual to stated error
	}{
		{"cubic with noise", 401, 1e-4, 1e-4, bend, true, 1.25},
		{"cubic with noise, few points", 31, 1e-4, 0, bend, true, 1.25},
		{"a degree that just does not stand out", 401, 1e-4, 1e-4, hidden, true, 1.25},
		{"too few points", 11, 1e-4, 0, bend, false, 0},
		{"noise alone", 201, 1e-4, 0, func(float64) complex128 { return 0 }, true, 1.25},
		{"ripple far above the noise", 401, 1e-4, 0, ripple, false, 0},
		{"ripple far above the noise, points so few that it looks like noise", 31, 1e-4, 1e-4, ripple, false, 0},
		{"ripple as large as the noise", 401, 0.01, 0.01, ripple, false, 0},
		{"ripple that noise hides", 401, 0.05, 0.05, ripple, true, 2},
	} {
		t.Run(test.name, func(t *testing.T) {
			smoothed, errorSquare, leverage, noise := 0, 0.0, 0.0, 0.0
			const trials = 200
			for seed := range uint64(trials) {
				hz, values := curve(test.points, test.rms, rand.New(rand.NewPCG(seed, 4)), test.of)
				p, ok := fitPolynomial(hz, values, test.stated)
				if !ok {
					continue
				}
				smoothed++
				noise += p.noise / trials
				for i, f := range hz {
					value, l := p.at(f)
					errorSquare += square(value - test.of(-1+2*float64(i)/float64(test.points-1)))
					leverage += l * p.noise * p.noise
				}
			}
			if !test.smooth {
				if smoothed > 0 {
					t.Errorf("smoothed in %d of %d draws", smoothed, trials)
				}
				return
			}
			if smoothed < trials*9/10 {
				t.Errorf("smoothed in %d of %d draws only", smoothed, trials)
			}
			if ratio := math.Sqrt(errorSquare / leverage); !(ratio > 0.8 && ratio < test.high) {
				t.Errorf("actual error over stated %.3g", ratio)
			}
			if want := test.rms * float64(smoothed) / trials; math.Abs(noise/want-1) > 0.1 {
				t.Errorf("noise of one reading %g, want %g", noise, want)
			}
		})
	}
}

// TestNoiselessIsExact: nothing is smoothed away that noise did not bring.
func TestNoiselessIsExact(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(2, 200).Draw(t, "points")
		// Less than half a radian from point to point: else no eye could tell the curve from noise.
		scale := rapid.Float64Range(0.1, 30).Draw(t, "bend") * math.Min(1, float64(n-1)/240)
		hz, values := curve(n, 0, rand.New(rand.NewPCG(1, 1)), func(x float64) complex128 { return cmplx.Exp(complex(0.1*x, scale*x*x)) })
		s := Standard{Kind: Short, FrequencyHz: hz}
		for _, v := range values {
			s.Re, s.Im = append(s.Re, real(v)), append(s.Im, imag(v))
		}
		trace := newTrace(&s, 0)
		for i, f := range hz {
			if got := trace.at(f); abs(got-values[i]) > 1e-10 {
				t.Fatalf("%v at point %d of %d, read %v", got, i, n, values[i])
			}
		}
	})
}

// TestInterpolation: a cubic comes back exactly on any grid, a straight line with any number of nodes, in any order of asking.
func TestInterpolation(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(2, 30).Draw(t, "nodes")
		x := []float64{1e6}
		for range n - 1 {
			x = append(x, x[len(x)-1]+rapid.Float64Range(10, 1000).Draw(t, "step"))
		}
		degree := min(3, n-1)
		of := func(f float64) complex128 {
			u := (f - 1e6) / 1e4
			return complex(1+u, u-1) + complex(0, map[bool]float64{true: u*u - u*u*u, false: 0}[degree == 3])
		}
		g, values := newGrid(x), make([]complex128, n)
		for i, f := range x {
			values[i] = of(f)
		}
		cell := 0
		for range 20 {
			f := rapid.Float64Range(x[0], x[n-1]).Draw(t, "f")
			cell = g.cell(f, cell)
			if !(x[cell] <= f && f <= x[cell+1]) {
				t.Fatalf("%g is not in cell %d of %v", f, cell, x)
			}
			first, w := g.weights(f, cell)
			if got := g.apply(values, first, &w); abs(got-of(f)) > 1e-9*(1+abs(of(f))) {
				t.Fatalf("%v at %g, want %v", got, f, of(f))
			}
		}
	})
}

func TestMeanDelay(t *testing.T) {
	hz, values := curve(201, 0, rand.New(rand.NewPCG(1, 1)), func(x float64) complex128 { return complex(2, 0.3*x*x) })
	for i, f := range hz {
		values[i] *= turn(35e-9, f, 0)
	}
	if got := meanDelay(hz, values); math.Abs(got-35e-9) > 1e-14 {
		t.Errorf("delay %g s, want 35 ns", got)
	}
	if got := meanDelay(hz, make([]complex128, len(hz))); got != 0 {
		t.Errorf("delay %g s of nothing", got)
	}
}

// TestRoughNoise: third differences tell the noise under a curve that no polynomial follows.
func TestRoughNoise(t *testing.T) {
	_, values := curve(401, 1e-4, rand.New(rand.NewPCG(5, 5)), func(x float64) complex128 { return 1 + complex(0.01*math.Sin(20*x), 0) })
	if got := roughNoise(values); math.Abs(got/1e-4-1) > 0.15 {
		t.Errorf("noise %g, want 1e-4", got)
	}
}

// TestSolvedIsShared uses one Solved from several goroutines at once; the race detector watches.
func TestSolvedIsShared(t *testing.T) {
	f := plainFixture()
	c := f.calibration(standards(PiNetwork), f.frequencies(51, 1))
	c.ReceiverNoise = &ReceiverNoise{RMS: 1e-6}
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	var group sync.WaitGroup
	for k := range 4 {
		group.Go(func() {
			var all []Contribution
			var err error
			for range 20 {
				if all, err = solved.Contributions(all, f.frequencies(50+k, 0.9), sweep.S21); err != nil {
					t.Error(err)
				}
			}
		})
	}
	group.Wait()
}
