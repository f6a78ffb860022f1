package network

import (
	"errors"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"example.com/admit/service/sweep"
)

// plainFixture is a pi-network without faults, 10 ns of cable and 80 dB of leakage.
func plainFixture() *fixture {
	return &fixture{kind: PiNetwork, centreHz: 25e6, halfHz: 50e3, short: 0.0333, leak: 3.3e-6, zt: 25.1, ztSlope: 1e-5, shortDelay: 10e-9}
}

func grid401(lowHz, highHz float64) []float64 {
	x := make([]float64, 401)
	g := sweep.Grid{StartHz: lowHz, StopHz: highHz, Points: len(x)}
	for i := range x {
		x[i] = g.At(i)
	}
	return x
}

// TestMismatch lists what cannot fit together, and asks that the sentence names it with its numbers.
func TestMismatch(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(21, 1)
	good := func() *Calibration { return f.calibration(standards(PiNetwork), x) }
	for _, test := range []struct {
		name    string
		bad     func() *Calibration
		sweepHz []float64
		want    []string
	}{
		{"sweep beyond the band", good, grid401(24.9e6, 25.01e6), []string{"24.9 to 25.01 MHz", "24.95 to 25.05 MHz"}},
		{"a point that is no number", good, []float64{25e6, math.NaN()}, []string{"the standards cover"}},
		{"bands that do not meet", func() *Calibration {
			c := good()
			c.Standards[2] = f.read(c.Standards[2], grid401(30e6, 31e6), 0, nil)
			c.Standards = c.Standards[:3]
			return c
		}, nil, []string{"no band is covered by 3 distinct standards", "load 25 ohm 30 to 31 MHz", "24.95 to 25.05 MHz"}},
		{"sweep across a gap", func() *Calibration {
			c := good()
			for _, s := range standards(PiNetwork) {
				c.Standards = append(c.Standards, f.read(s, grid401(75e6, 76e6), 0, nil))
			}
			return c
		}, []float64{25e6, 50e6, 75.5e6}, []string{"25 to 75.5 MHz", "24.95 to 25.05 MHz, 75 to 76 MHz"}},
		{"load of 25 ohm said to be 30", func() *Calibration {
			c := good()
			c.Standards = c.Standards[:3]
			c.Standards[2].ResistanceOhm = 25 * 1.2
			return c
		}, nil, []string{"termination of 30.12", "20.5 % off the nominal 25 ohm", "at most 15 %"}},
		{"the open was read with the short in", func() *Calibration {
			c := good()
			c.Standards = c.Standards[:3]
			short := f.read(Standard{Kind: Short, ResistanceOhm: 20}, x, 0, nil)
			c.Standards[0].Re, c.Standards[0].Im = short.Re, short.Im
			return c
		}, nil, []string{"short and open read too much alike", "a ratio of 1.79", "at least 3"}},
		{"short and open alike in reflection", func() *Calibration {
			g := plainFixture()
			g.kind, g.short, g.leak, g.zt = Reflection, 1, -1, 50
			c := g.calibration(standards(Reflection)[:3], x)
			short := g.read(Standard{Kind: Load, ResistanceOhm: 4}, x, 0, nil) // the short left out, a bad contact in
			for i := range short.Re {
				c.Standards[0].Re[i], c.Standards[0].Im[i] = -short.Re[i], short.Im[i]+short.Re[i]
				c.Standards[1].Re[i], c.Standards[1].Im[i] = -short.Re[i], short.Im[i]
			}
			return c
		}, nil, []string{"short and open read too much alike", "at least 1"}},
		{"one of two loads is 3 % off", func() *Calibration {
			c := good()
			c.ContactUncertaintyOhm = 0.01
			c.Standards[3].ResistanceOhm *= 1.03
			c.Standards[3].File = "cal-load-54.s2p"
			return c
		}, nil, []string{"contradict each other", "load 55.62 ohm (cal-load-54.s2p)"}},
		{"check standard off", func() *Calibration {
			c := good()
			check := f.read(Standard{Kind: Check, ResistanceOhm: 50.4}, x, 0, nil)
			check.ResistanceOhm, check.ResistanceUncertaintyOhm, check.File = 50, 0.1, "cal-check.s2p"
			c.Standards = append(c.Standards, check)
			return c
		}, nil, []string{"check standard 50 ohm (cal-check.s2p) reads 50.4 ohm", "where 50 ohm is stated: 0.4 ohm off", "(k = 3) of 0.30"}},
		{"check standard elsewhere", func() *Calibration {
			c := good()
			c.Standards = append(c.Standards, f.read(Standard{Kind: Check, ResistanceOhm: 50}, grid401(1e6, 2e6), 0, nil))
			return c
		}, nil, []string{"check standard 50 ohm was read over 1 to 2 MHz"}},
	} {
		t.Run(test.name, func(t *testing.T) {
			solved, err := Solve(test.bad())
			if test.sweepHz != nil {
				if err != nil {
					t.Fatal(err)
				}
				err = solved.Terms(new(Terms), test.sweepHz, sweep.S21)
			}
			if !isMismatch(err) {
				t.Fatalf("got %v, want a mismatch", err)
			}
			for _, part := range test.want {
				if !strings.Contains(err.Error(), part) {
					t.Errorf("%q does not say %q", err, part)
				}
			}
		})
	}
}

// TestInadmissible asks that every fault is listed and that none is taken for a mismatch.
func TestInadmissible(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(5, 1)
	for _, test := range []struct {
		name string
		harm func(*Calibration)
		want []string
	}{
		{"two standards", func(c *Calibration) { c.Standards = c.Standards[:2] }, []string{"standards: want 3 or more of distinct values", "got 2"}},
		{"two loads that are one", func(c *Calibration) {
			c.Standards = append(c.Standards[:1], c.Standards[2], c.Standards[2])
			c.Standards[2].ResistanceOhm = 25.3
		}, []string{"got 2"}},
		{"a check is no standard to solve from", func(c *Calibration) { c.Standards[2].Kind = Check; c.Standards = c.Standards[:3] }, []string{"got 2"}},
		{"several at once", func(c *Calibration) {
			c.Network = "bridge"
			c.DriftGainDB = math.NaN()
			c.Standards[0].Kind = "air"
			c.Standards[1].Re[3] = math.Inf(1)
			c.Standards[2].FrequencyHz = []float64{1e6, 1e6, 2e6, 3e6, 4e6}
			c.Standards[3].Im = c.Standards[3].Im[:2]
		}, []string{"fixture_network", "drift.gain_db", "standards[0]: kind", "standards[1]: samples", "standards[2]: frequency_hz", "standards[3]: samples"}},
		{"load without resistance", func(c *Calibration) { c.Standards[2].ResistanceOhm = 0 }, []string{"standards[2]: resistance_ohm"}},
		{"magnitudes and phases", func(c *Calibration) {
			for i, re := range c.Standards[1].Re {
				c.Standards[1].Re[i] = math.Abs(re)
			}
			c.Standards[1].Im = nil
		}, []string{"all complex or all magnitudes"}},
		{"one point", func(c *Calibration) {
			s := &c.Standards[1]
			s.FrequencyHz, s.Re, s.Im = s.FrequencyHz[:1], s.Re[:1], s.Im[:1]
		}, []string{"standards[1]: points: want 2 to 200001, got 1"}},
	} {
		t.Run(test.name, func(t *testing.T) {
			c := f.calibration(standards(PiNetwork), x)
			test.harm(c)
			_, err := Solve(c)
			if err == nil || isMismatch(err) {
				t.Fatalf("got %v", err)
			}
			for _, part := range test.want {
				if !strings.Contains(err.Error(), part) {
					t.Errorf("%q does not say %q", err, part)
				}
			}
		})
	}
}

// TestQuantities asks every network for every quantity, without standards.
func TestQuantities(t *testing.T) {
	for _, k := range Kinds() {
		solved, err := Solve(&Calibration{Network: k})
		if err != nil {
			t.Fatal(err)
		}
		if solved.Calibrated() || solved.Bands() != nil || solved.Network() != k {
			t.Errorf("%s: calibrated without standards", k)
		}
		for _, q := range sweep.Quantities() {
			err := solved.Terms(new(Terms), []float64{1e6, 2e6}, q)
			stated := q == sweep.Admittance || q == sweep.Impedance
			var unsupported *UnsupportedError
			switch {
			case stated || (k != Reflection && k != Unknown && q != sweep.S11) || (k == Reflection && q == sweep.S11):
				if err != nil {
					t.Errorf("%s from %s: %v", q, k, err)
				}
			case k == Unknown:
				if !errors.Is(err, ErrUnknownNetwork) {
					t.Errorf("%s from an unknown network: %v", q, err)
				}
			case !errors.As(err, &unsupported) || !strings.Contains(err.Error(), string(q)) || !strings.Contains(err.Error(), string(k)):
				t.Errorf("%s from %s: %v", q, k, err)
			}
		}
	}
}

// TestUnknownNetworkSolved: three standards tell the terms of whatever circuit there is.
func TestUnknownNetworkSolved(t *testing.T) {
	f := plainFixture()
	f.kind = Unknown
	x := f.frequencies(9, 1)
	solved, err := Solve(f.calibration(standards(PiNetwork)[:3], x))
	if err != nil {
		t.Fatal(err)
	}
	var terms Terms
	if err := solved.Terms(&terms, x, sweep.S21); err != nil {
		t.Fatal(err)
	}
	for i, hz := range x {
		if want := f.terms(hz); abs(terms.C[i]-want.c) > 1e-11*abs(want.c) {
			t.Errorf("termination %v at %g Hz, want %v", terms.C[i], hz, want.c)
		}
	}
}

// TestCheckStandard: a good one is reported with what it read, and noise does not make it fail.
func TestCheckStandard(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(401, 1)
	failed, beyond := 0, 0
	for seed := range uint64(100) {
		random := rand.New(rand.NewPCG(seed, 2))
		const rms = 3e-5 // 0.1 % of the short: 61 dB
		c := &Calibration{Network: PiNetwork}
		for _, s := range append(standards(PiNetwork)[:3], Standard{Kind: Check, ResistanceOhm: 50, File: "cal-check.s2p"}) {
			c.Standards = append(c.Standards, f.read(s, x, rms, random))
		}
		solved, err := Solve(c)
		if err != nil {
			failed++
			continue
		}
		r := solved.CheckReadings()
		if len(r) != 1 || r[0].File != "cal-check.s2p" || abs(r[0].StatedOhm-50) > 1e-9 {
			t.Fatalf("check readings %+v", r)
		}
		if r[0].DeviationOhm > r[0].ExpandedUncertaintyOhm/checkCoverage {
			beyond++
		}
		if r[0].ExpandedUncertaintyOhm > 0.2 {
			t.Errorf("expanded uncertainty %g ohm after smoothing 401 points", r[0].ExpandedUncertaintyOhm)
		}
	}
	// The worst of 16 readings of one smoothed curve lies beyond one sigma often, beyond three hardly ever.
	if failed > 2 || beyond < 10 {
		t.Errorf("%d of 100 good check standards failed, %d read beyond one standard uncertainty", failed, beyond)
	}
}

// TestCheckStandardAllowsFor: a check standard that reads 0.4 ohm high passes when the calibration says that repeat contact, gain or phase
// do as much, and the uncertainty that it is held against grows by just that.
func TestCheckStandardAllowsFor(t *testing.T) {
	f := plainFixture()
	x := f.frequencies(21, 1)
	// Z = Zt (Ts/T - 1): gain dg moves it by (Z + Zt) dg, here 75.1 ohm.
	for _, test := range []struct {
		name  string
		allow func(*Calibration)
		want  float64 // expanded, ohm
	}{
		{"contact", func(c *Calibration) { c.ContactUncertaintyOhm = 0.2 }, 3 * 0.2},
		{"gain", func(c *Calibration) { c.DriftGainDB = 0.02 }, 3 * 75.1 * (math.Pow(10, 0.001) - 1)},
		{"phase", func(c *Calibration) { c.DriftPhaseDeg = 0.15 }, 3 * 75.1 * 0.15 * math.Pi / 180},
	} {
		c := f.calibration(standards(PiNetwork)[:3], x)
		check := f.read(Standard{Kind: Check, ResistanceOhm: 50.4}, x, 0, nil)
		check.ResistanceOhm = 50
		c.Standards = append(c.Standards, check)
		if _, err := Solve(c); !isMismatch(err) {
			t.Errorf("nothing allowed for: %v", err)
		}
		test.allow(c)
		solved, err := Solve(c)
		if err != nil {
			t.Errorf("%s: %v", test.name, err)
			continue
		}
		r := solved.CheckReadings()[0]
		if math.Abs(r.DeviationOhm-0.4) > 1e-3 || math.Abs(r.ExpandedUncertaintyOhm/test.want-1) > 0.02 {
			t.Errorf("%s: %v, want an expanded uncertainty of %.3g ohm", test.name, r, test.want)
		}
	}
}

// TestSeveralBands: a kind read in two bands is one standard, and a sweep in either is corrected.
func TestSeveralBands(t *testing.T) {
	f := plainFixture()
	c := &Calibration{Network: PiNetwork}
	for _, x := range [][]float64{grid401(74e6, 76e6), grid401(24e6, 26e6), grid401(25.5e6, 27e6)} {
		for _, s := range standards(PiNetwork)[:3] {
			s.ResistanceUncertaintyOhm = 0.02
			c.Standards = append(c.Standards, f.read(s, x, 0, nil))
		}
	}
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	if got, want := listed(solved.Bands()), "24 to 27 MHz, 74 to 76 MHz"; got != want {
		t.Errorf("bands %s, want %s", got, want)
	}
	var all []Contribution
	for _, x := range [][]float64{grid401(24.9e6, 25.1e6), grid401(25.4e6, 25.6e6), {74e6, 75e6, 76e6}, {24e6 * (1 - 1e-12), 25e6}} {
		if all, err = solved.Contributions(all, x, sweep.S21); err != nil {
			t.Fatal(err)
		}
		groups := map[string]int{}
		for _, n := range all {
			if n.Name == InfluenceStandards {
				groups[n.Group]++
			}
		}
		if len(groups) != 2 || groups["load resistance"] != 1 || groups["short resistance"] != 1 {
			t.Errorf("influences of the standards in one sweep: %v", groups)
		}
		var terms Terms
		if err := solved.Terms(&terms, x, sweep.S21); err != nil {
			t.Fatal(err)
		}
		for i, hz := range x {
			if want := f.terms(hz); abs(terms.B[i]-want.b) > 1e-8*abs(want.b) || abs(terms.C[i]-want.c) > 1e-8*abs(want.c) {
				t.Fatalf("terms %v %v at %g Hz, want %v", terms.B[i], terms.C[i], hz, want)
			}
		}
	}
}
