package network

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/crystal"
	"example.com/admit/service/sweep"
)

// TestPassivity holds true samples and turned ones against passivity. At +2 degrees the admittance of C0 has a negative real part of
// 3.5 % of itself, which noise hides at a point and not over a sweep.
func TestPassivity(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(401, 0.5)
	c := f.calibration(standards(PiNetwork)[:3], f.frequencies(21, 1))
	c.DriftPhaseDeg = 0.1
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	var terms Terms
	if err := solved.Terms(&terms, x, sweep.S21); err != nil {
		t.Fatal(err)
	}
	influences, err := solved.Contributions(nil, x, sweep.S21)
	if err != nil {
		t.Fatal(err)
	}
	unit := crystal.Unit{Modes: []crystal.Mode{crystal.ModeFromCapacitance(25e6, 18, 5.5e-15)}, ShuntCapacitanceFarad: 1.6e-12}
	const rms = 3e-6
	for _, test := range []struct {
		name       string
		degrees    float64
		influences []Contribution
		low, high  float64
	}{
		{"true samples", 0, influences, 0, 5},
		{"turned within the drift", 0.1, influences, 0, 5},
		{"turned back by 2 degrees: gain where the unit is inductive", -2, influences, 5, 30},
		{"turned by 2 degrees", 2, influences, 10, 30},
		{"turned by 2 degrees, no influence known", 2, nil, 20, math.Inf(1)},
	} {
		t.Run(test.name, func(t *testing.T) {
			beyond, most := 0, 0.0
			const trials = 50
			for seed := range uint64(trials) {
				random := rand.New(rand.NewPCG(seed, 9))
				s := &sweep.Sweep{Quantity: sweep.S21, FrequencyHz: x, Re: make([]float64, len(x)), Im: make([]float64, len(x))}
				for i, hz := range x {
					m := f.terms(hz)
					sample := m.sample(1, unit.Admittance(hz)) * cmplx.Rect(1, test.degrees*math.Pi/180)
					s.Re[i] = real(sample) + rms/math.Sqrt2*random.NormFloat64()
					s.Im[i] = imag(sample) + rms/math.Sqrt2*random.NormFloat64()
				}
				p := Passivity(&terms, test.influences, s, rms)
				most = math.Max(most, p.Significance)
				if p.Significance < test.low || p.Significance > test.high {
					beyond++
				}
				if p.Significance > 0 && !(p.ConductanceSiemens < 0 && p.Points > 0 && p.FirstPoint+p.Points <= len(x)) {
					t.Fatalf("%+v", p)
				}
			}
			t.Logf("significance up to %.3g", most)
			if beyond > 0 {
				t.Errorf("%d of %d sweeps outside %g to %g", beyond, trials, test.low, test.high)
			}
		})
	}
}

// TestPassivityAtTheEdge: a short, an open, no noise known, magnitudes: no number is made up and nothing is not a number.
func TestPassivityAtTheEdge(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(16, 0.5)
	solved, err := Solve(&Calibration{Network: PiNetwork})
	if err != nil {
		t.Fatal(err)
	}
	var terms Terms
	if err := solved.Terms(&terms, x, sweep.S21); err != nil {
		t.Fatal(err)
	}
	short := real(terms.B[0] / terms.C[0])
	for _, test := range []struct {
		name  string
		value float64
		q     sweep.Quantity
		rms   float64
	}{
		{"exact short", short, sweep.S21, 1e-6},
		{"exact open", 0, sweep.S21, 1e-6},
		{"nothing known", -short, sweep.S21, 0},
		{"magnitude", short, sweep.S21Magnitude, 1e-6},
	} {
		s := &sweep.Sweep{Quantity: test.q, FrequencyHz: x, Re: make([]float64, len(x)), Im: make([]float64, len(x))}
		for i := range x {
			s.Re[i] = test.value
		}
		if p := Passivity(&terms, nil, s, test.rms); p != (Passive{}) {
			t.Errorf("%s: %+v", test.name, p)
		}
	}
}
