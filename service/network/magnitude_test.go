package network

import (
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"example.com/admit/service/sweep"
)

// magnitudes takes standards of a fixture without their phases.
func (f *fixture) magnitudes(known []Standard, frequencyHz []float64, rms float64, random *rand.Rand) *Calibration {
	c := &Calibration{Network: f.kind}
	for _, s := range known {
		s = f.read(s, frequencyHz, rms, random)
		for i := range s.Re {
			s.Re[i] = math.Hypot(s.Re[i], s.Im[i])
		}
		s.Im = nil
		c.Standards = append(c.Standards, s)
	}
	return c
}

func magnitudeStandards() []Standard {
	return []Standard{
		{Kind: Short, ResistanceOhm: 0.05, ResistanceUncertaintyOhm: 0.01},
		{Kind: Open},
		{Kind: Load, ResistanceOhm: 25, ResistanceUncertaintyOhm: 0.02},
		{Kind: Check, ResistanceOhm: 60, ResistanceUncertaintyOhm: 0.05},
	}
}

// TestMagnitudes: the terms of magnitude-only standards give the modulus of any resistor in a nominal network, whatever its gain.
func TestMagnitudes(t *testing.T) {
	f := plainFixture()
	f.zt, f.leak, f.short = 25, 1e-6, 0.0333*1.7
	x := f.frequencies(101, 1)
	random := rand.New(rand.NewPCG(3, 3))
	solved, err := Solve(f.magnitudes(magnitudeStandards(), x, 1e-6, random))
	if err != nil {
		t.Fatal(err)
	}
	if len(solved.CheckReadings()) != 2 {
		t.Errorf("check readings %v", solved.CheckReadings())
	}
	at := f.frequencies(77, 0.9)
	var terms Terms
	if err := solved.Terms(&terms, at, sweep.S21Magnitude); err != nil {
		t.Fatal(err)
	}
	for i, hz := range at {
		m := f.terms(hz)
		for _, ohm := range []complex128{5, 40, 300} {
			got, want := abs(terms.Sample(i, 1/ohm)), abs(m.sample(ohm, 1))
			if math.Abs(got-want) > 3e-6 { // leakage and three sigma of the smoothed short
				t.Errorf("%v ohm reads %g at %g Hz, want %g", ohm, got, hz, want)
			}
		}
	}
	if err := solved.Terms(&terms, at, sweep.S21); !isMismatch(err) || !strings.Contains(err.Error(), "phases") {
		t.Errorf("phases from magnitudes: %v", err)
	}
	if err := solved.Terms(&terms, []float64{1e6}, sweep.S21Magnitude); !isMismatch(err) {
		t.Errorf("far from the band: %v", err)
	}
	all, err := solved.Contributions(nil, at, sweep.S21Magnitude)
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, n := range all {
		names = append(names, strings.TrimSpace(n.Name+" "+n.Group))
	}
	want := []string{"gain_drift", "nominal_termination", "mismatch resistive", "mismatch reactive", "calibration_standards short resistance",
		"calibration_noise short", "mismatch leakage, real part", "mismatch leakage, imaginary part"}
	if !slices.Equal(names, want) {
		t.Errorf("influences\n%q, want\n%q", names, want)
	}
	// The short off by 0.01 ohm of 25 moves every sample by 0.04 %.
	m := all[4].Terms.Sample(0, 0.02) / terms2(t, solved, at).Sample(0, 0.02)
	if math.Abs(abs(m)-1-0.01/25.05) > 1e-6 {
		t.Errorf("0.01 ohm of the short changes a sample by %g", abs(m)-1)
	}
}

// TestLeakageOfMagnitudes: what an open read is what leaks, in two parts of unknown phase.
func TestLeakageOfMagnitudes(t *testing.T) {
	f := plainFixture()
	f.zt, f.leak = 25, 2e-5
	x := f.frequencies(5, 1)
	solved, err := Solve(f.magnitudes(magnitudeStandards()[:3], x, 0, nil))
	if err != nil {
		t.Fatal(err)
	}
	all, err := solved.Contributions(nil, x, sweep.S21Magnitude)
	if err != nil {
		t.Fatal(err)
	}
	sum := 0.0
	for _, n := range all {
		if n.Name == InfluenceMismatch {
			sum += square(n.Terms.A[3])
		}
	}
	if math.Abs(math.Sqrt(sum)/2e-5-1) > 1e-9 {
		t.Errorf("leakage %g, the open read 2e-5", math.Sqrt(sum))
	}
}

func terms2(t *testing.T, s *Solved, x []float64) *Terms {
	t.Helper()
	var terms Terms
	if err := s.Terms(&terms, x, sweep.S21Magnitude); err != nil {
		t.Fatal(err)
	}
	return &terms
}

// TestMagnitudesThatDoNotFit: a network that is not the nominal one shows on the loads.
func TestMagnitudesThatDoNotFit(t *testing.T) {
	f := plainFixture()
	f.ztSlope = 0
	x := f.frequencies(31, 1)
	for _, test := range []struct {
		name string
		harm func(*fixture, *Calibration)
		zt   complex128
		want string
	}{
		{"termination 8 % off", func(*fixture, *Calibration) {}, 27, "load 25 ohm reads 23.1"},
		{"check standard 4 % off", func(_ *fixture, c *Calibration) { c.Standards[3].ResistanceOhm = 62.5 }, 25, "check standard 62.5 ohm reads 60"},
		{"open and short alike", func(_ *fixture, c *Calibration) { c.Standards[1].Re = c.Standards[0].Re }, 25, "a ratio of 1 where"},
		{"two shorts in one band", func(_ *fixture, c *Calibration) { c.Standards = append(c.Standards, c.Standards[0]) }, 25, "two shorts"},
		{"load elsewhere", func(f *fixture, c *Calibration) {
			c.Standards[2].FrequencyHz = grid401(1e6, 2e6)[:31]
		}, 25, "load 25 ohm was read over"},
	} {
		f.zt = test.zt
		c := f.magnitudes(magnitudeStandards(), x, 0, nil)
		test.harm(f, c)
		if _, err := Solve(c); !isMismatch(err) || !strings.Contains(err.Error(), test.want) {
			t.Errorf("%s: %v, want a mismatch that says %q", test.name, err, test.want)
		}
	}
	c := f.magnitudes(magnitudeStandards(), x, 0, nil)
	c.Standards = c.Standards[1:]
	if _, err := Solve(c); err == nil || isMismatch(err) || !strings.Contains(err.Error(), "a short, to which magnitudes are referred") {
		t.Errorf("no short: %v", err)
	}
}

// TestMagnitudeOfComplexStandards: complex standards serve magnitude sweeps too, with nothing nominal about them.
func TestMagnitudeOfComplexStandards(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(11, 1)
	c := f.calibration(standards(PiNetwork)[:3], x)
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	terms := terms2(t, solved, x)
	for i, hz := range x {
		if m := f.terms(hz); abs(terms.C[i]-m.c) > 1e-10*abs(m.c) {
			t.Errorf("termination %v, want %v", terms.C[i], m.c)
		}
	}
	all, err := solved.Contributions(nil, x, sweep.S21Magnitude)
	if err != nil {
		t.Fatal(err)
	}
	for _, n := range all {
		if n.Name == InfluenceMismatch || n.Name == InfluencePhaseDrift {
			t.Errorf("%s of a solved magnitude", n.Name)
		}
	}
}
