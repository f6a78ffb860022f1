package survey

import (
	"math"
	"testing"

	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
)

// quantities of a unit of two modes, as the bound and the fit are compared in them: fs, ln R, ln L of each, and C0.
func quantities(u truth) []float64 {
	var q []float64
	for _, b := range u.modes {
		q = append(q, b.fs, math.Log(b.r), math.Log(b.l))
	}
	return append(q, u.c0)
}

func unitOf(q []float64) truth {
	var u truth
	for k := 0; k+3 <= len(q)-1; k += 3 {
		u.modes = append(u.modes, branch{q[k], math.Exp(q[k+1]), math.Exp(q[k+2])})
	}
	u.c0 = q[len(q)-1]
	return u
}

// bound returns the Cramer-Rao standard deviations: the Fisher matrix from central differences of the test's own circuit, inverted. Nothing
// of the package takes part.
func bound(u truth, n fixture, f []float64, rms float64) []float64 {
	q := quantities(u)
	p := len(q)
	step := make([]float64, p)
	for k := range step {
		step[k] = 1e-4
		switch {
		case k == p-1:
			step[k] = 1e-4 * q[k]
		case k%3 == 0:
			step[k] = 1e-3 * u.modes[k/3].width(n)
		}
	}
	derivative := make([][]complex128, p)
	for k := range derivative {
		plus, minus := append([]float64(nil), q...), append([]float64(nil), q...)
		plus[k] += step[k]
		minus[k] -= step[k]
		above, below := unitOf(plus), unitOf(minus)
		for _, x := range f {
			derivative[k] = append(derivative[k], (n.sample(above.admittance(x))-n.sample(below.admittance(x)))/complex(2*step[k], 0))
		}
	}
	// In units of the steps, so that the elimination sees numbers of like size.
	fisher := make([][]complex128, p)
	for a := range fisher {
		fisher[a] = make([]complex128, p)
		for b := range p {
			sum := 0.0
			for i := range f {
				x, y := derivative[a][i], derivative[b][i]
				sum += real(x)*real(y) + imag(x)*imag(y)
			}
			fisher[a][b] = complex(2*sum/(rms*rms)*step[a]*step[b], 0)
		}
	}
	sd := make([]float64, p)
	for k := range sd {
		unit := make([]complex128, p)
		unit[k] = 1
		sd[k] = math.Sqrt(real(solveDense(fisher, unit)[k])) * step[k]
	}
	return sd
}

// The joint fit of two modes reaches the Cramer-Rao bound in all seven parameters, without bias, and knows it.
func TestEfficiency(t *testing.T) {
	const trials = 1000
	rng := random(t)
	for _, test := range []struct {
		name           string
		in             fixture
		decibel, apart float64 // of the second mode, apart in widths of the main one
		snr            float64
	}{
		{"apart", piNetwork, 10, 12, 60},
		{"two widths, 3 dB", piNetwork, 3, 2, 50},
		{"reflection", reflection, 20, -6, 70},
	} {
		n, u := test.in, tenMegahertz()
		bw := u.modes[0].width(n)
		u.modes = append(u.modes, unwanted(u.modes[0], n, 10e6+test.apart*bw, test.decibel, 0.5*bw))
		f := grid(10e6-25*bw, 10e6+25*bw, 401)
		rms := u.peak(n) * decibels(-test.snr)
		limit, want := bound(u, n, f, rms), quantities(u)
		clean := settled(u, n, f)
		sum, squares, covered := make([]float64, len(want)), make([]float64, len(want)), make([]int, len(want))
		var v Surveyor
		var out Result
		counted := 0
		for range trials {
			req := noisy(clean, rms, rng)
			req.FalseAlarmRate = 1e-4 // a false mode in a hundred surveys would be one in every ten here
			v.Survey(req, &out)
			if len(out.Modes) != 2 {
				continue
			}
			counted++
			rows := len(out.Value)
			for k := range want {
				got, sd := out.Value[k], math.Sqrt(out.Statistical[k*rows+k]) // C0 follows the modes in Value as well
				e := (got - want[k]) / limit[k]
				sum[k] += e
				squares[k] += e * e
				if math.Abs(got-want[k]) <= 1.96*sd {
					covered[k]++
				}
			}
		}
		if counted < trials-5 {
			t.Errorf("%s: two modes in %d of %d surveys", test.name, counted, trials)
		}
		for k := range want {
			mean := sum[k] / float64(counted)
			sd := math.Sqrt(squares[k]/float64(counted) - mean*mean)
			share := float64(covered[k]) / float64(counted)
			t.Logf("%s, parameter %d: sd/bound %.3f, bias %+.3f, coverage %.3f", test.name, k, sd, mean, share)
			if sd < 0.9 || sd > 1.1 || math.Abs(mean) > 0.15 || share < 0.92 || share > 0.98 {
				t.Errorf("%s, parameter %d: sd/bound %.3f, bias %+.3f sd, coverage %.3f", test.name, k, sd, mean, share)
			}
		}
	}
}

// The share of an influence is by how much the fit moves when the samples are those of the changed terms.
func TestSystematicShift(t *testing.T) {
	n, u := skewNetwork, tenMegahertz()
	bw := u.modes[0].width(n)
	u.modes = append(u.modes, unwanted(u.modes[0], n, 10e6+9*bw, 10, 0.6*bw))
	f := grid(10e6-20*bw, 10e6+20*bw, 801)
	const clock = 3e-8
	for _, change := range []struct {
		name string
		in   fixture
	}{
		{"gain", fixture{"", n.a * 1.0005, n.b * 1.0005, n.c, n.d, n.q}},
		{"termination", fixture{"", n.a, n.b + n.a*0.02, n.c + 0.02, n.d, n.q}},
	} {
		req := settled(u, n, f)
		req.NoiseRMS = 1e-5 // stated, so that the tiny misfit that a change leaves is not searched for modes
		req.Contributions = []network.Contribution{{Name: change.name, Group: "g", Terms: *change.in.terms(f)}}
		req.ClockUncertainty = clock
		var v Surveyor
		var out, moved Result
		v.Survey(req, &out)
		changed := *req
		changed.Terms = change.in.terms(f)
		changed.Contributions = nil
		v.Survey(&changed, &moved)
		if len(out.Modes) != 2 || len(moved.Modes) != 2 || len(out.Systematic) != 2 {
			t.Fatalf("%s: %d and %d modes, %d influences", change.name, len(out.Modes), len(moved.Modes), len(out.Systematic))
		}
		if c := out.Systematic[0]; c.Name != change.name || c.Group != "g" {
			t.Errorf("influence %s %s", c.Name, c.Group)
		}
		for k, s := range out.Systematic[0].Shift {
			second := 3e-7 // what a change of 5e-4 does to the second order, of a logarithm; of fs in widths; of C0 in picofarads
			switch {
			case k >= 6:
				second *= 1e-12
			case k%3 == 0:
				second *= bw
			}
			if got := moved.Value[k] - out.Value[k]; math.Abs(got-s) > 0.01*math.Abs(s)+second {
				t.Errorf("%s: parameter %d moves by %g, the share says %g", change.name, k, got, s)
			}
		}
		// The clock moves both frequencies by the same part, and nothing else.
		c := out.Systematic[1]
		if c.Name != resonance.ClockInfluence {
			t.Errorf("influence %s", c.Name)
		}
		for k, s := range c.Shift {
			want := 0.0
			if k == 0 || k == 3 {
				want = clock * out.Value[k]
			}
			if math.Abs(s-want) > 1e-12*math.Abs(want) {
				t.Errorf("clock moves parameter %d by %g, want %g", k, s, want)
			}
		}
	}
}

// What gain does to Rn and R1 it does to both: in their ratio it nearly cancels, by name and group also where R1 is that of a main sweep.
func TestSuppressionKeepsCommonInfluences(t *testing.T) {
	rng := random(t)
	n, u := piNetwork, tenMegahertz()
	bw := u.modes[0].width(n)
	u.modes = append(u.modes, unwanted(u.modes[0], n, 10e6+9*bw, 10, 0.6*bw))
	rms := u.peak(n) * decibels(-60)
	off := fixture{"", n.a, n.b * 1.01, n.c, n.d, n.q}
	influence := func(f []float64) []network.Contribution {
		return []network.Contribution{{Name: network.InfluenceGainDrift, Terms: *off.terms(f)}}
	}
	var v Surveyor
	var out Result
	survey := func(low, high float64, points int, main *resonance.Estimate) Quantity {
		f := grid(10e6+low*bw, 10e6+high*bw, points)
		req := noisy(settled(u, n, f), rms, rng)
		req.Contributions, req.Main = influence(f), main
		v.Survey(req, &out)
		for _, m := range out.Modes {
			if m.Kind == UnwantedMode && m.Suppressed {
				return m.Suppression[PiNetworkTransmission]
			}
		}
		t.Fatalf("no unwanted mode between %g and %g widths", low, high)
		return Quantity{}
	}
	main := mainEstimate(t, u, n, rms, influence, rng)
	for _, test := range []struct {
		name      string
		low, high float64
		points    int
		main      *resonance.Estimate
	}{
		{"both in the survey", -20, 20, 801, nil},
		{"R1 from the main sweep", -20, 20, 101, main},
		{"main mode beyond the survey", 5, 20, 401, main},
	} {
		s := survey(test.low, test.high, test.points, test.main)
		t.Logf("%s: %.3f dB +- %.4f statistical, %.4f systematic", test.name, s.Value, s.Statistical, s.Systematic)
		// A gain of 1 % is 0.0864 dB of R + 25 for either mode.
		if s.Systematic > 0.01 {
			t.Errorf("%s: systematic part %.4f dB of the suppression, although both modes share it", test.name, s.Systematic)
		}
		if math.Abs(s.Value-10) > 4*s.StandardUncertainty()+0.01 {
			t.Errorf("%s: suppression %.3f dB +- %.3f, want 10", test.name, s.Value, s.StandardUncertainty())
		}
	}
	main.Systematic[0].Group = "another"
	if s := survey(5, 20, 401, main); s.Systematic < 0.06 {
		t.Errorf("influences of different groups: systematic part %.4f dB, want that of two independent gains", s.Systematic)
	}
}
