package network

import (
	"errors"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/crystal"
	"example.com/admit/service/sweep"
	"pgregory.net/rapid"
)

// fixture is a made-up linear fixture: a short transmission with delay and slope, a termination that wanders, a leakage with a delay of its
// own. Everything changes slowly with frequency once the delays are out, as cables and strays do.
type fixture struct {
	kind                     Kind
	centreHz, halfHz         float64
	short, leak              complex128
	shortSlope, leakSlope    complex128
	zt, ztSlope, ztCurve     complex128
	shortDelay, leakageDelay float64
}

// centreOf is a frequency at which the kind of network is used, and typicalOhm what is measured in it.
func centreOf(k Kind) (centreHz, typicalOhm float64) {
	switch k {
	case HighImpedance:
		return 32768, 38e3
	case SeriesThrough:
		return 100e6, 48
	case Reflection:
		return 5e6, 10
	}
	return 25e6, 18
}

// drawFixture makes a fixture of a kind, up to a few percent from nominal.
func drawFixture(t *rapid.T, k Kind) fixture {
	part := rapid.Float64Range(-1, 1)
	draw := func(name string, size float64) complex128 {
		return complex(size*part.Draw(t, name), size*part.Draw(t, name))
	}
	centre, _ := centreOf(k)
	nominal, err := nominalTerms(k, 50, k.NominalTerminationOhm())
	if err != nil {
		t.Fatal(err)
	}
	short := nominal.b / nominal.c
	gain := cmplx.Rect(rapid.Float64Range(0.2, 5).Draw(t, "gain"), rapid.Float64Range(-3, 3).Draw(t, "phase"))
	f := fixture{
		kind: k, centreHz: centre, halfHz: centre * rapid.Float64Range(2e-4, 5e-3).Draw(t, "half span"),
		short: short * gain * (1 + draw("short", 0.05)), shortSlope: draw("short slope", 0.01),
		leak: draw("leak", 0.05) * short * gain, leakSlope: draw("leak slope", 0.01),
		zt: nominal.c * (1 + draw("termination", 0.05)), ztSlope: draw("termination slope", 0.01), ztCurve: draw("termination curve", 0.003),
		shortDelay: rapid.Float64Range(0, 0.2).Draw(t, "delay"), leakageDelay: rapid.Float64Range(0, 0.2).Draw(t, "leakage delay"),
	}
	if k == Reflection { // an open there is no leakage: it reads the same delay as the short, turned by half
		f.leak, f.leakageDelay = -short*gain*(1+draw("open", 0.05)), f.shortDelay
	}
	// Delays so far are in periods of the centre: tens of nanoseconds at 10 MHz.
	f.shortDelay /= centre / 10
	f.leakageDelay /= centre / 10
	return f
}

func (f *fixture) terms(frequencyHz float64) three {
	x := complex((frequencyHz-f.centreHz)/f.halfHz, 0)
	zt := f.zt * (1 + f.ztSlope*x + f.ztCurve*x*x)
	short := f.short * (1 + f.shortSlope*x) * turn(f.shortDelay, frequencyHz, 0)
	return three{f.leak * (1 + f.leakSlope*x) * turn(f.leakageDelay, frequencyHz, 0), short * zt, zt}
}

// read returns the sweep of a standard in the fixture, with complex noise where rms is above 0.
func (f *fixture) read(s Standard, frequencyHz []float64, rms float64, random *rand.Rand) Standard {
	s.FrequencyHz = frequencyHz
	s.Re, s.Im = make([]float64, len(frequencyHz)), make([]float64, len(frequencyHz))
	for i, hz := range frequencyHz {
		m := f.terms(hz)
		u, v := s.ratio(hz)
		sample := m.sample(u, v)
		if rms > 0 {
			sample += complex(rms/math.Sqrt2*random.NormFloat64(), rms/math.Sqrt2*random.NormFloat64())
		}
		s.Re[i], s.Im[i] = real(sample), imag(sample)
	}
	return s
}

// frequencies returns n uniform frequencies over a share of the fixture's span about its centre.
func (f *fixture) frequencies(n int, share float64) []float64 {
	g := sweep.Grid{StartHz: f.centreHz - share*f.halfHz, StopHz: f.centreHz + share*f.halfHz, Points: n}
	x := make([]float64, n)
	for i := range x {
		x[i] = g.At(i)
	}
	return x
}

// standards returns ideal-ish open, short and load for the network, and a second load.
func standards(k Kind) []Standard {
	_, typical := centreOf(k)
	zt := k.NominalTerminationOhm()
	if k == HighImpedance {
		return []Standard{
			{Kind: Open, CapacitanceFarad: 2e-15},
			{Kind: Load, ResistanceOhm: 10e3, CapacitanceFarad: 30e-15},
			{Kind: Load, ResistanceOhm: 100e3, CapacitanceFarad: 30e-15},
			{Kind: Short, ResistanceOhm: 0.02},
		}
	}
	return []Standard{
		{Kind: Open, CapacitanceFarad: 20e-15},
		{Kind: Short, ResistanceOhm: 0.01, InductanceHenry: 0.2e-9},
		{Kind: Load, ResistanceOhm: zt, InductanceHenry: 0.5e-9, CapacitanceFarad: 30e-15},
		{Kind: Load, ResistanceOhm: 3 * typical, InductanceHenry: 0.3e-9},
	}
}

// calibration takes the given standards in the fixture.
func (f *fixture) calibration(known []Standard, frequencyHz []float64) *Calibration {
	c := &Calibration{ID: "N1-A", Network: f.kind}
	for _, s := range known {
		c.Standards = append(c.Standards, f.read(s, frequencyHz, 0, nil))
	}
	return c
}

// unit is a crystal unit with its resonance in the middle of the fixture's span.
func (f *fixture) unit(t *rapid.T) crystal.Unit {
	_, typical := centreOf(f.kind)
	r := typical * rapid.Float64Range(0.3, 3).Draw(t, "R1")
	q := rapid.Float64Range(2e3, 2e5).Draw(t, "Q")
	m := rapid.Float64Range(3, 300).Draw(t, "M")
	return crystal.Unit{
		Modes:                 []crystal.Mode{{ResonanceHz: f.centreHz, ResistanceOhm: r, InductanceHenry: q * r / (2 * math.Pi * f.centreHz)}},
		ShuntCapacitanceFarad: 1 / (2 * math.Pi * f.centreHz * r * m),
	}
}

// ratioOf is the quantity of a kind's own samples.
func ratioOf(k Kind) sweep.Quantity {
	if k == Reflection {
		return sweep.S11
	}
	return sweep.S21
}

var measurable = []Kind{PiNetwork, SeriesThrough, Reflection, HighImpedance}

// TestEveryNetwork runs the same demands on every kind of fixture network.
func TestEveryNetwork(t *testing.T) {
	for _, k := range measurable {
		t.Run(string(k), func(t *testing.T) {
			for _, demand := range []struct {
				name string
				test func(*testing.T, Kind)
			}{
				{"nominal terms describe the circuit", demandNominal},
				{"embed, calibrate, correct returns the unit", demandRoundTrip},
				{"other grids and bands of standards", demandOtherGrids},
				{"stated quantities pass unchanged", demandStated},
				{"influences are off by what they say", demandInfluences},
				{"a wrong load is noticed", demandWrongLoad},
				{"power balances", demandPower},
			} {
				t.Run(demand.name, func(t *testing.T) { demand.test(t, k) })
			}
		})
	}
}

func demandNominal(t *testing.T, k Kind) {
	solved, err := Solve(&Calibration{Network: k})
	if err != nil {
		t.Fatal(err)
	}
	var terms Terms
	if err := solved.Terms(&terms, []float64{1e6, 2e6}, ratioOf(k)); err != nil {
		t.Fatal(err)
	}
	zt := k.NominalTerminationOhm()
	for _, z := range []complex128{1, 25, complex(zt, 0), complex(10, -300), 1e5} {
		want := (z - 50) / (z + 50)
		if circuit, ok := k.Circuit(50, zt); ok {
			want = circuit.Transmission(z) / circuit.Transmission(0) * circuit.Transmission(0)
			if k == PiNetwork { // nominal 25 ohm, where the resistors make 24.995
				want = circuit.Transmission(0) * 25 / (25 + z)
			}
		}
		if got := terms.Sample(1, 1/z); abs(got-want) > 1e-13*abs(want)+1e-17 {
			t.Errorf("%v ohm gives %v, want %v", z, got, want)
		}
		if got := 1 / terms.Admittance(0, want); abs(got-z) > 1e-9*abs(z) {
			t.Errorf("%v ohm comes back as %v", z, got)
		}
	}
}

func demandRoundTrip(t *testing.T, k Kind) {
	rapid.Check(t, func(t *rapid.T) {
		f := drawFixture(t, k)
		known := standards(k)[:rapid.IntRange(3, 4).Draw(t, "standards")]
		points := rapid.IntRange(2, 120).Draw(t, "points")
		x := f.frequencies(points, 1)
		solved, err := Solve(f.calibration(known, x))
		if err != nil {
			t.Fatal(err)
		}
		unit := f.unit(t)
		if rapid.Bool().Draw(t, "downwards") {
			x = reversed(x)
		}
		var terms Terms
		if err := solved.Terms(&terms, x, ratioOf(k)); err != nil {
			t.Fatal(err)
		}
		for i, hz := range x {
			want := unit.Admittance(hz)
			m := f.terms(hz)
			got := terms.Admittance(i, m.sample(1, want))
			if abs(got-want) > 1e-9*(abs(want)+1/abs(m.c)) {
				t.Fatalf("at %g Hz the unit has %v S, corrected %v S", hz, want, got)
			}
		}
	})
}

func reversed(x []float64) []float64 {
	y := make([]float64, len(x))
	for i := range x {
		y[len(x)-1-i] = x[i]
	}
	return y
}

func demandOtherGrids(t *testing.T, k Kind) {
	rapid.Check(t, func(t *rapid.T) {
		f := drawFixture(t, k)
		c := &Calibration{ID: "N1-A", Network: k}
		for _, s := range standards(k) {
			n := rapid.IntRange(41, 201).Draw(t, "points")
			share := rapid.Float64Range(1, 2).Draw(t, "share")
			c.Standards = append(c.Standards, f.read(s, f.frequencies(n, share), 0, nil))
		}
		solved, err := Solve(c)
		if err != nil {
			t.Fatal(err)
		}
		x := f.frequencies(173, 1)
		var terms Terms
		if err := solved.Terms(&terms, x, ratioOf(k)); err != nil {
			t.Fatal(err)
		}
		unit := f.unit(t)
		for i, hz := range x {
			want := unit.Admittance(hz)
			m := f.terms(hz)
			got := terms.Admittance(i, m.sample(1, want))
			if abs(got-want) > 1e-6*(abs(want)+1/abs(m.c)) { // of a cubic over steps of a tenth of the half span
				t.Fatalf("at %g Hz the unit has %v S, corrected %v S", hz, want, got)
			}
		}
	})
}

func demandStated(t *testing.T, k Kind) {
	rapid.Check(t, func(t *rapid.T) {
		f := drawFixture(t, k)
		for _, c := range []*Calibration{{Network: k}, f.calibration(standards(k), f.frequencies(5, 1))} {
			solved, err := Solve(c)
			if err != nil {
				t.Fatal(err)
			}
			y := f.unit(t).Admittance(f.centreHz * 1.0001)
			var terms Terms
			for q, sample := range map[sweep.Quantity]complex128{sweep.Admittance: y, sweep.Impedance: 1 / y} {
				// Far outside any band: it takes no calibration to read siemens.
				if err := solved.Terms(&terms, []float64{1, 1e9}, q); err != nil {
					t.Fatal(err)
				}
				if got := terms.Admittance(0, sample); abs(got-y) > 1e-12*abs(y) {
					t.Errorf("%s %v becomes %v S, want %v S", q, sample, got, y)
				}
				if got := terms.Sample(1, y); abs(got-sample) > 1e-12*abs(sample) {
					t.Errorf("%v S becomes %s %v, want %v", y, q, got, sample)
				}
			}
		}
	})
}

// demandInfluences solves with a standard that truly is one standard uncertainty off and asks that the influence of that name tell the same.
func demandInfluences(t *testing.T, k Kind) {
	rapid.Check(t, func(t *rapid.T) {
		f := drawFixture(t, k)
		known := standards(k)[:3]
		which := rapid.IntRange(0, 2).Draw(t, "which")
		x := f.frequencies(33, 1)
		c := f.calibration(known, x)
		s := &c.Standards[which]
		s.ResistanceUncertaintyOhm, s.InductanceUncertaintyHenry = 1e-3*k.NominalTerminationOhm(), 0.1e-9
		s.CapacitanceUncertaintyFarad = 5e-15 * centreOf10(k)
		solved, err := Solve(c)
		if err != nil {
			t.Fatal(err)
		}
		all, err := solved.Contributions(nil, x, ratioOf(k))
		if err != nil {
			t.Fatal(err)
		}
		found := 0
		for _, value := range s.uncertainValues() {
			moved := f.calibration(known, x)
			moved.Standards[which] = value.shifted(&moved.Standards[which])
			other, err := Solve(moved)
			if err != nil {
				t.Fatal(err)
			}
			var want Terms
			if err := other.Terms(&want, x, ratioOf(k)); err != nil {
				t.Fatal(err)
			}
			for _, n := range all {
				if n.Name != InfluenceStandards || !hasSuffix(n.Group, value.name) {
					continue
				}
				found++
				for i := range x {
					if abs(n.Terms.A[i]-want.A[i]) > 1e-7*abs(f.short) || abs(n.Terms.B[i]-want.B[i]) > 1e-7*abs(want.B[i]) || abs(n.Terms.C[i]-want.C[i]) > 1e-7*abs(want.C[i]) {
						t.Fatalf("%s of the %s: terms %v %v %v at point %d, solved with it off %v %v %v", n.Group, s.Kind, n.Terms.A[i], n.Terms.B[i], n.Terms.C[i], i, want.A[i], want.B[i], want.C[i])
					}
				}
			}
		}
		if found != len(s.uncertainValues()) {
			t.Fatalf("%d influences for %d uncertain values of the %s", found, len(s.uncertainValues()), s.Kind)
		}
	})
}

// centreOf10 is how much weaker a capacitance acts at the network's frequency than at 10 MHz.
func centreOf10(k Kind) float64 {
	centre, _ := centreOf(k)
	return math.Min(10e6/centre, 10)
}

func hasSuffix(s, end string) bool { return len(s) >= len(end) && s[len(s)-len(end):] == end }

func demandWrongLoad(t *testing.T, k Kind) {
	rapid.Check(t, func(t *rapid.T) {
		f := drawFixture(t, k)
		f.zt = complex(k.NominalTerminationOhm(), 0)
		known := standards(k)[:3]
		c := f.calibration(known, f.frequencies(11, 1))
		factor := rapid.SampledFrom([]float64{0.5, 0.7, 1.4, 2}).Draw(t, "factor")
		for i := range c.Standards {
			if c.Standards[i].Kind == Load {
				c.Standards[i].ResistanceOhm *= factor
			}
		}
		if _, err := Solve(c); !isMismatch(err) {
			t.Fatalf("loads %g of their stated value: %v", 1/factor, err)
		}
	})
}

// demandPower holds the power in R1 against the power that the circuit delivers to a resistor, by its own analysis.
func demandPower(t *testing.T, k Kind) {
	c := &Calibration{Network: k}
	d, err := c.Drive()
	if err != nil {
		t.Fatal(err)
	}
	circuit, ok := k.Circuit(50, k.NominalTerminationOhm())
	if !ok { // reflection: what is not reflected stays in the resistor
		for _, r := range []float64{5, 50, 500} {
			reflected := (r - 50) / (r + 50)
			if got, want := d.PowerAtResonanceWatt(0, r), 1e-3*(1-reflected*reflected); math.Abs(got/want-1) > 1e-12 {
				t.Errorf("%g ohm takes %g W, want %g W", r, got, want)
			}
		}
		return
	}
	if got, want := d.OpenVoltagePerEMF, circuit.OpenVoltagePerEMF(); math.Abs(got/want-1) > 1e-12 {
		t.Errorf("transfer from short transmission %.12g V/V, from circuit analysis %.12g V/V", got, want)
	}
	if got, want := circuit.TerminationOhm(), k.NominalTerminationOhm(); math.Abs(got/want-1) > 3e-4 {
		t.Errorf("the circuit terminates with %g ohm, nominal is %g ohm", got, want)
	}
	// What the far port receives: current through the unit, out of the far half. S21 = 2 V/E.
	for _, r := range []float64{10, 1000, 50e3} {
		current := d.CurrentAtResonanceAmpere(0, r)
		emf := math.Sqrt(4 * 1e-3 * 50)
		received := real(circuit.Transmission(complex(r, 0))) * emf / 2
		if got, want := current*circuit.OpenVoltagePerEMF()*50, received; math.Abs(got/want-1) > 3e-4 {
			t.Errorf("%g ohm: the current makes %g V at the far port, the chain gives %g V", r, got, want)
		}
	}
}

func isMismatch(err error) bool {
	var m *MismatchError
	return errors.As(err, &m)
}
