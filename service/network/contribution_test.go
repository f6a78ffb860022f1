package network

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"
	"testing"

	"example.com/admit/service/sweep"
)

// meanImpedanceError corrects noise-free samples of a resistor and returns the mean error over the sweep in ohm.
func meanImpedanceError(t *testing.T, f *fixture, terms *Terms, ohm complex128) complex128 {
	t.Helper()
	var sum complex128
	for i, hz := range terms.FrequencyHz {
		m := f.terms(hz)
		sum += 1/terms.Admittance(i, m.sample(ohm, 1)) - ohm
	}
	return sum / complex(float64(len(terms.FrequencyHz)), 0)
}

// TestCalibrationNoise draws the noise of the standards many times and holds the scatter of a corrected resistor against what the
// contributions of one calibration say: smoothed traces of 401 and 51 points, and 11 points that are not smoothed.
func TestCalibrationNoise(t *testing.T) {
	for _, test := range []struct {
		name   string
		points int
		ohm    complex128
		share  float64 // of the band, for the sweep
		low    float64 // acceptable ratio of predicted to actual
		high   float64
	}{
		{"401 points, at the termination", 401, 25, 0.1, 0.8, 1.25},
		{"401 points, high resistance", 401, 500, 0.1, 0.8, 1.25},
		{"401 points, whole band", 401, 25, 1, 0.8, 2},
		{"51 points", 51, 10, 0.1, 0.75, 1.4},
		{"11 points, sweep between two", 11, 25, 0.05, 0.9, 1.5},
		{"11 points, whole band", 11, 25, 1, 0.8, 1.5},
	} {
		t.Run(test.name, func(t *testing.T) {
			f := plainFixture()
			x := f.frequencies(test.points, 1)
			at := f.frequencies(21, test.share)
			const rms, trials = 3e-6, 400
			actual, predicted := 0.0, 0.0
			for seed := range uint64(trials) {
				random := rand.New(rand.NewPCG(seed, 7))
				c := &Calibration{Network: PiNetwork, ReceiverNoise: &ReceiverNoise{RMS: rms}}
				for _, s := range standards(PiNetwork)[:3] {
					c.Standards = append(c.Standards, f.read(s, x, rms, random))
				}
				solved, err := Solve(c)
				if err != nil {
					t.Fatal(err)
				}
				var terms Terms
				if err := solved.Terms(&terms, at, sweep.S21); err != nil {
					t.Fatal(err)
				}
				offset := meanImpedanceError(t, f, &terms, test.ohm)
				actual += square(offset)
				all, err := solved.Contributions(nil, at, sweep.S21)
				if err != nil {
					t.Fatal(err)
				}
				for _, n := range all {
					if n.Name == InfluenceNoise {
						predicted += square(meanImpedanceError(t, f, &n.Terms, test.ohm) - offset)
					}
				}
			}
			ratio := math.Sqrt(predicted / actual)
			t.Logf("rms error %.3g ohm, predicted %.3g ohm", math.Sqrt(actual/trials), math.Sqrt(predicted/trials))
			if !(ratio >= test.low && ratio <= test.high) {
				t.Errorf("predicted over actual %.3g, want %g to %g", ratio, test.low, test.high)
			}
		})
	}
}

// TestDriftActsOnTheSample: a gain is T (1 + dg) and a phase T exp(j dphi), for every unit.
func TestDriftActsOnTheSample(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(7, 1)
	c := f.calibration(standards(PiNetwork)[:3], x)
	c.DriftGainDB, c.DriftPhaseDeg = 0.02, 0.1
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	nominal, err := Solve(&Calibration{Network: PiNetwork})
	if err != nil {
		t.Fatal(err)
	}
	for _, test := range []struct {
		name   string
		solved *Solved
		q      sweep.Quantity
		factor complex128
	}{
		{InfluenceGainDrift, solved, sweep.S21, complex(math.Pow(10, 0.001), 0)},
		{InfluencePhaseDrift, solved, sweep.S21, cmplx.Rect(1, 0.1*math.Pi/180)},
		{InfluenceGainDrift, solved, sweep.S21Magnitude, complex(math.Pow(10, 0.001), 0)},
		{InfluenceGainDrift, solved, sweep.Impedance, complex(math.Pow(10, 0.001), 0)},
		{InfluenceNominalGain, nominal, sweep.S21, complex(math.Pow(10, DefaultNominalGainDB/20), 0)},
		{InfluenceNominalPhase, nominal, sweep.Admittance, cmplx.Rect(1, DefaultNominalPhaseDeg*math.Pi/180)},
	} {
		var plain Terms
		if err := test.solved.Terms(&plain, x, test.q); err != nil {
			t.Fatal(err)
		}
		all, err := test.solved.Contributions(nil, x, test.q)
		if err != nil {
			t.Fatal(err)
		}
		k := slices.IndexFunc(all, func(n Contribution) bool { return n.Name == test.name })
		if k < 0 {
			t.Errorf("%s: no %s", test.q, test.name)
			continue
		}
		for i := range x {
			for _, y := range []complex128{0.04, complex(0.001, 0.02)} {
				want := plain.Sample(i, y) * test.factor
				if got := all[k].Terms.Sample(i, y); abs(got-want) > 1e-14*abs(want) {
					t.Errorf("%s of %s: sample %v, want %v", test.name, test.q, got, want)
				}
			}
		}
	}
}

// TestNamesOfInfluences asks which influences each way of measuring has, and that none is there twice.
func TestNamesOfInfluences(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(5, 1)
	c := f.calibration(standards(PiNetwork), x)
	c.ReceiverNoise = &ReceiverNoise{RMS: 1e-6}
	c.Standards[2].ResistanceUncertaintyOhm, c.Standards[3].ResistanceUncertaintyOhm = 0.02, 0.05
	c.Standards[1].InductanceUncertaintyHenry = 1e-10
	for _, test := range []struct {
		name string
		c    *Calibration
		q    sweep.Quantity
		want []string
	}{
		{"nominal transmission", &Calibration{Network: PiNetwork}, sweep.S21, []string{"nominal_gain", "nominal_phase", "nominal_termination"}},
		{"nominal magnitude", &Calibration{Network: PiNetwork}, sweep.S21Magnitude, []string{"nominal_gain", "nominal_termination", "mismatch resistive", "mismatch reactive"}},
		{"nominal admittance", &Calibration{Network: Reflection}, sweep.Admittance, []string{"nominal_gain", "nominal_phase"}},
		{"solved impedance", c, sweep.Impedance, []string{"gain_drift", "phase_drift"}},
		{"solved transmission", c, sweep.S21, []string{"gain_drift", "phase_drift",
			"calibration_noise 1 open, real part", "calibration_noise 1 open, imaginary part",
			"calibration_standards short inductance", "calibration_noise 2 short, real part", "calibration_noise 2 short, imaginary part",
			"calibration_standards load 25 ohm resistance", "calibration_noise 3 load, real part", "calibration_noise 3 load, imaginary part",
			"calibration_standards load 54 ohm resistance", "calibration_noise 4 load, real part", "calibration_noise 4 load, imaginary part"}},
	} {
		t.Run(test.name, func(t *testing.T) {
			solved, err := Solve(test.c)
			if err != nil {
				t.Fatal(err)
			}
			all, err := solved.Contributions(nil, x, test.q)
			if err != nil {
				t.Fatal(err)
			}
			var names []string
			for _, n := range all {
				name := n.Name
				if n.Group != "" {
					name += " " + n.Group
				}
				names = append(names, name)
				for i := range x {
					if !finite(n.Terms.A[i]) || !finite(n.Terms.B[i]) || !finite(n.Terms.C[i]) || n.Terms.FrequencyHz[i] != x[i] {
						t.Fatalf("%s at point %d: %+v", name, i, n.Terms)
					}
				}
			}
			if !slices.Equal(names, test.want) {
				t.Errorf("influences\n%q, want\n%q", names, test.want)
			}
		})
	}
}

// TestSteadyState: Terms and Contributions allocate nothing once their buffers have the length.
func TestSteadyState(t *testing.T) {
	f := plainFixture()
	c := f.calibration(standards(PiNetwork), f.frequencies(201, 1))
	c.ReceiverNoise = &ReceiverNoise{RMS: 1e-6}
	c.Standards[2].ResistanceUncertaintyOhm = 0.02
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	x := f.frequencies(401, 0.7)
	var terms Terms
	var all []Contribution
	work := func() {
		if err := solved.Terms(&terms, x, sweep.S21); err != nil {
			t.Fatal(err)
		}
		if all, err = solved.Contributions(all, x, sweep.S21); err != nil {
			t.Fatal(err)
		}
	}
	work()
	if n := testing.AllocsPerRun(20, work); n != 0 {
		t.Errorf("%g allocations", n)
	}
	// Buffers left over from a longer list of influences are none of the shorter one.
	nominal, err := Solve(&Calibration{Network: PiNetwork})
	if err != nil {
		t.Fatal(err)
	}
	if all, err = nominal.Contributions(all, x, sweep.S21); err != nil || len(all) != 3 {
		t.Errorf("%d influences of a nominal network, %v", len(all), err)
	}
}

// BenchmarkTerms401 is the interpolation of one sweep of 401 points between 201 calibrated ones.
func BenchmarkTerms401(b *testing.B) {
	f := plainFixture()
	solved, err := Solve(f.calibration(standards(PiNetwork), f.frequencies(201, 1)))
	if err != nil {
		b.Fatal(err)
	}
	x := f.frequencies(401, 0.7)
	var terms Terms
	b.ReportAllocs()
	for b.Loop() {
		if err := solved.Terms(&terms, x, sweep.S21); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/401, "ns/point")
}

// BenchmarkContributions401 is all influences of three noisy standards on the same sweep.
func BenchmarkContributions401(b *testing.B) {
	f := plainFixture()
	c := &Calibration{Network: PiNetwork}
	random := rand.New(rand.NewPCG(1, 1))
	for _, s := range standards(PiNetwork)[:3] {
		s.ResistanceUncertaintyOhm, s.CapacitanceUncertaintyFarad = 0.02, 5e-15
		c.Standards = append(c.Standards, f.read(s, f.frequencies(201, 1), 3e-6, random))
	}
	solved, err := Solve(c)
	if err != nil {
		b.Fatal(err)
	}
	x := f.frequencies(401, 0.7)
	var all []Contribution
	b.ReportAllocs()
	for b.Loop() {
		if all, err = solved.Contributions(all, x, sweep.S21); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(len(all)), "influences")
}

// BenchmarkSolve401 is the solution of three standards of 401 points, once for each calibration.
func BenchmarkSolve401(b *testing.B) {
	f := plainFixture()
	c := f.calibration(standards(PiNetwork)[:3], f.frequencies(401, 1))
	b.ReportAllocs()
	for b.Loop() {
		if _, err := Solve(c); err != nil {
			b.Fatal(err)
		}
	}
}
