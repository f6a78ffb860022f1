package network

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/sweep"
	"pgregory.net/rapid"
)

// TestStandardImpedance holds the stated values against the circuits that they describe, written out the long way.
func TestStandardImpedance(t *testing.T) {
	const hz = 100e6
	w := 2 * math.Pi * hz
	for _, test := range []struct {
		name string
		s    Standard
		want complex128 // siemens
	}{
		{"open", Standard{Kind: Open, CapacitanceFarad: 20e-15, ResistanceOhm: 3}, complex(0, w*20e-15)},
		{"short", Standard{Kind: Short, ResistanceOhm: 0.1, InductanceHenry: 1e-9, CapacitanceFarad: 1}, 1 / complex(0.1, w*1e-9)},
		{"load", Standard{Kind: Load, ResistanceOhm: 25, InductanceHenry: 2e-9, CapacitanceFarad: 1e-12}, 1/complex(25, w*2e-9) + complex(0, w*1e-12)},
		{"check", Standard{Kind: Check, ResistanceOhm: 1e5, CapacitanceFarad: 1e-13}, complex(1e-5, w*1e-13)},
	} {
		u, v := test.s.ratio(hz)
		if got := v / u; abs(got-test.want) > 1e-12*abs(test.want) {
			t.Errorf("%s: %v S, want %v S", test.name, got, test.want)
		}
		if got := test.s.impedanceOhm(hz); abs(got-1/test.want) > 1e-12*abs(1/test.want) {
			t.Errorf("%s: %v ohm, want %v ohm", test.name, got, 1/test.want)
		}
	}
	if z := (&Standard{Kind: Open}).impedanceOhm(hz); !cmplx.IsInf(z) {
		t.Errorf("ideal open: %v ohm", z)
	}
}

// TestLeastSquaresInTheSamplePlane: what is left of more than three readings stands at right angles, weights counted, to every direction in
// which the terms can move the samples: that is where the sum of squares of the samples is least.
func TestLeastSquaresInTheSamplePlane(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		random := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "seed"), 1))
		f := plainFixture()
		m := f.terms(f.centreHz)
		var readings []reading
		for _, ohm := range []float64{1e9, 0, 25, 70, 200} {
			r := reading{complex(ohm, 0), 1, 0, 0.2 + random.Float64()}
			r.sample = m.sample(r.u, r.v) + complex(3e-6*random.NormFloat64(), 3e-6*random.NormFloat64())
			readings = append(readings, r)
		}
		var e equations
		got, ok := e.solve(readings, m.c, 25)
		if ok {
			got, ok = e.solve(readings, got.c, 25)
		}
		if !ok {
			t.Fatal("not solved")
		}
		var lengths [3]float64
		total := 0.0
		var sums [3]complex128
		for _, r := range readings {
			w := complex(r.weight, 0)
			residual := w * (r.sample - got.sample(r.u, r.v))
			total += square(residual)
			divisor := r.u + got.c*r.v
			for k, direction := range []complex128{r.u / divisor, r.v / divisor, -got.sample(r.u, r.v) * r.v / divisor} {
				sums[k] += cmplx.Conj(w*direction) * residual
				lengths[k] += square(w * direction)
			}
		}
		for k := range sums {
			if cosine := abs(sums[k]) / math.Sqrt(total*lengths[k]); cosine > 2e-3 {
				t.Errorf("the residual leans on term %d: cosine %.3g", k, cosine)
			}
		}
	})
}

// TestUncertainStandardCountsLittle: a fourth standard that is known to 5 % and 4 % off hardly moves what three good ones say.
func TestUncertainStandardCountsLittle(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(9, 1)
	c := f.calibration(standards(PiNetwork), x)
	c.Standards[3].ResistanceOhm *= 1.04
	c.Standards[3].ResistanceUncertaintyOhm = 0.05 * c.Standards[3].ResistanceOhm
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	var terms Terms
	if err := solved.Terms(&terms, x, sweep.S21); err != nil {
		t.Fatal(err)
	}
	for i, hz := range x {
		if want := f.terms(hz); abs(terms.C[i]-want.c) > 1e-4*abs(want.c) {
			t.Errorf("termination %v at %g Hz, want %v", terms.C[i], hz, want.c)
		}
	}
}

// TestOneStandardInTwoSweeps: where two sweeps of one load overlap, its value is off in both at once.
func TestOneStandardInTwoSweeps(t *testing.T) {
	f := plainFixture()
	f.ztSlope = 0
	make2 := func(ohm float64) *Calibration {
		c := f.calibration(standards(PiNetwork)[:3], f.frequencies(21, 1))
		c.Standards = append(c.Standards, f.read(standards(PiNetwork)[2], f.frequencies(31, 2), 0, nil))
		for _, k := range []int{2, 3} {
			c.Standards[k].ResistanceOhm, c.Standards[k].ResistanceUncertaintyOhm = ohm, 0.1
		}
		return c
	}
	x := f.frequencies(5, 1)
	solved, err := Solve(make2(25))
	if err != nil {
		t.Fatal(err)
	}
	all, err := solved.Contributions(nil, x, sweep.S21)
	if err != nil {
		t.Fatal(err)
	}
	moved, err := Solve(make2(25.1))
	if err != nil {
		t.Fatal(err)
	}
	var want Terms
	if err := moved.Terms(&want, x, sweep.S21); err != nil {
		t.Fatal(err)
	}
	found := 0
	for _, n := range all {
		if n.Name == InfluenceStandards {
			found++
			if got := n.Terms.C[2]; abs(got-want.C[2]) > 1e-6*abs(want.C[2]) {
				t.Errorf("termination %v with the load off, want %v", got, want.C[2])
			}
		}
	}
	if found != 1 {
		t.Errorf("%d influences of one load", found)
	}
}

// TestNoiseOfAReadingHasTwoParts: the real and the imaginary part move the terms a quarter turn apart.
func TestNoiseOfAReadingHasTwoParts(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(5, 1)
	c := f.calibration(standards(PiNetwork)[:3], x)
	c.ReceiverNoise = &ReceiverNoise{RMS: 1e-6}
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	var plain Terms
	if err := solved.Terms(&plain, x, sweep.S21); err != nil {
		t.Fatal(err)
	}
	all, err := solved.Contributions(nil, x, sweep.S21)
	if err != nil {
		t.Fatal(err)
	}
	pairs := 0
	for k := 1; k < len(all); k++ {
		if all[k].Name != InfluenceNoise || !hasSuffix(all[k].Group, "imaginary part") {
			continue
		}
		pairs++
		first, second := all[k-1].Terms.C[2]-plain.C[2], all[k].Terms.C[2]-plain.C[2]
		if abs(first) == 0 || abs(second-1i*first) > 1e-6*abs(first) {
			t.Errorf("%s moves the termination by %v, the real part by %v", all[k].Group, second, first)
		}
	}
	if pairs != 3 {
		t.Errorf("%d pairs of parts for three standards", pairs)
	}
}
