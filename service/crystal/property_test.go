package crystal_test

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"
	"testing"

	"example.com/admit/service/crystal"
)

// scaled returns the unit with all impedances multiplied by z and all frequencies by f.
func scaled(u crystal.Unit, z, f float64) crystal.Unit {
	s := crystal.Unit{
		ShuntCapacitanceFarad:   u.ShuntCapacitanceFarad / z / f,
		ShuntConductanceSiemens: u.ShuntConductanceSiemens / z,
		LeadInductanceHenry:     u.LeadInductanceHenry * z / f,
	}
	for _, m := range u.Modes {
		s.Modes = append(s.Modes, crystal.Mode{
			ResonanceHz: m.ResonanceHz * f, ResistanceOhm: m.ResistanceOhm * z, InductanceHenry: m.InductanceHenry * z / f})
	}
	return s
}

// outcome is all that a unit answers, frequencies and offsets first, then resistances.
type outcome struct {
	frequencies, fractions, resistances []float64
	failures                            []error
}

func everything(u crystal.Unit, load float64) outcome {
	var o outcome
	keep := func(frequency, resistance float64, err error) {
		o.frequencies = append(o.frequencies, frequency)
		o.resistances = append(o.resistances, resistance)
		o.failures = append(o.failures, err)
	}
	keep(u.Resonance())
	keep(u.Antiresonance())
	keep(u.MaximumAdmittance())
	keep(u.MinimumAdmittance())
	o.frequencies = append(o.frequencies, u.ParallelResonanceHz(), u.LosslessLoadResonanceHz(load), u.FirstOrderLoadResonanceHz(load))
	for _, connection := range []crystal.LoadConnection{crystal.SeriesLoad, crystal.ParallelLoad} {
		keep(u.LoadResonance(load, connection))
		offset, err := u.LoadOffset(load, connection)
		pull, _ := u.PullingRange(load, 2*load, connection)
		sensitivity, _ := u.PullingSensitivity(load, connection)
		o.fractions = append(o.fractions, offset, pull, sensitivity*load)
		o.failures = append(o.failures, err)
	}
	o.fractions = append(o.fractions, u.FigureOfMerit(), u.CapacitanceRatio(), u.Modes[0].QualityFactor(), u.LosslessLoadOffset(load))
	o.resistances = append(o.resistances, u.FirstOrderLoadResistanceOhm(load))
	return o
}

// TestScaling multiplies all impedances by k, and all frequencies by m. R1 and L1 go with k, C1 and C0 against it; what is
// left are the same ratios and frequencies times m. With powers of two not one bit may change: nothing in the package may
// hang on an absolute size.
func TestScaling(t *testing.T) {
	random := rand.New(rand.NewPCG(5, 5))
	for n := range 200 {
		u := randomUnit(random, 1+n%4)
		load := u.ShuntCapacitanceFarad * math.Pow(10, 2*random.Float64()-0.5)
		z, f := math.Ldexp(1, random.IntN(41)-20), math.Ldexp(1, random.IntN(21)-10)
		a, b := everything(u, load), everything(scaled(u, z, f), load/z/f)
		for k := range a.frequencies {
			a.frequencies[k] *= f
		}
		for k := range a.resistances {
			a.resistances[k] *= z
		}
		if !slices.Equal(a.frequencies, b.frequencies) || !slices.Equal(a.fractions, b.fractions) ||
			!slices.Equal(a.resistances, b.resistances) || !slices.Equal(a.failures, b.failures) {
			t.Fatalf("unit %d scaled by %g and %g:\n%v\n%v", n, z, f, a, b)
		}
		if c, d := u.Modes[0].CapacitanceFarad()/z, scaled(u, z, 1).Modes[0].CapacitanceFarad(); c != d {
			t.Errorf("unit %d: C1 %g, want %g", n, d, c)
		}
	}
	// Any other factor leaves the frequencies to rounding.
	u := randomUnit(random, 3)
	load := 2 * u.ShuntCapacitanceFarad
	a, b := everything(u, load), everything(scaled(u, 3.7, 1), load/3.7)
	for k := range a.frequencies {
		if math.Abs(a.frequencies[k]-b.frequencies[k]) > 4*0x1p-52*a.frequencies[k] {
			t.Errorf("frequency %d: %.17g became %.17g", k, a.frequencies[k], b.frequencies[k])
		}
	}
}

// TestLossesSplitTheConnections: without losses both connections agree; with them the series root lies above the lossless one
// and the parallel root below.
func TestLossesSplitTheConnections(t *testing.T) {
	random := rand.New(rand.NewPCG(6, 6))
	compared := 0
	for range 500 {
		u := randomUnit(random, 1)
		u.ShuntConductanceSiemens, u.LeadInductanceHenry = 0, 0
		load := u.ShuntCapacitanceFarad * math.Pow(10, 2*random.Float64()-0.5)
		series, errSeries := u.LoadOffset(load, crystal.SeriesLoad)
		parallel, errParallel := u.LoadOffset(load, crystal.ParallelLoad)
		if errSeries != nil || errParallel != nil {
			continue
		}
		compared++
		lossless := u.LosslessLoadOffset(load)
		if !(series > lossless && parallel < lossless) {
			t.Errorf("M %.4g: series %.17g, lossless %.17g, parallel %.17g", u.FigureOfMerit(), series, lossless, parallel)
		}
		// Losses out of the way, the roots meet.
		u.Modes[0].ResistanceOhm *= 1e-9
		series, _ = u.LoadOffset(load, crystal.SeriesLoad)
		parallel, _ = u.LoadOffset(load, crystal.ParallelLoad)
		if math.Abs(series-lossless) > 1e-12*lossless || math.Abs(parallel-lossless) > 1e-12*lossless {
			t.Errorf("M %.4g: series %.17g, lossless %.17g, parallel %.17g", u.FigureOfMerit(), series, lossless, parallel)
		}
	}
	if compared < 300 {
		t.Errorf("only %d units compared", compared)
	}
}

// TestAdmittanceIsThatOfAPassiveCircuit: Y(-f) = conj Y(f), Re Y > 0, Z Y = 1, and the currents add up.
func TestAdmittanceIsThatOfAPassiveCircuit(t *testing.T) {
	random := rand.New(rand.NewPCG(7, 7))
	for n := range 500 {
		u := randomUnit(random, 1+n%4)
		frequency := u.Modes[0].ResonanceHz * (1 + 0.01*random.NormFloat64())
		y, z := u.Admittance(frequency), u.Impedance(frequency)
		if u.Admittance(-frequency) != cmplx.Conj(y) || u.Impedance(-frequency) != cmplx.Conj(z) {
			t.Errorf("unit %d: not conjugate at the negative frequency", n)
		}
		if real(y) <= 0 || real(z) <= 0 {
			t.Errorf("unit %d: a passive circuit with Y = %v, Z = %v", n, y, z)
		}
		if e := cmplx.Abs(y*z - 1); e > 1e-13 {
			t.Errorf("unit %d: Y Z - 1 = %g", n, e)
		}
		inside := u
		inside.LeadInductanceHenry = 0
		currents := u.MotionalCurrentShare(frequency) + u.ShuntAdmittance(frequency)*inside.Impedance(frequency)
		for _, m := range u.Modes[1:] {
			currents += m.Admittance(frequency) * inside.Impedance(frequency)
		}
		if e := cmplx.Abs(currents - 1); e > 1e-9 {
			t.Errorf("unit %d: currents add up to %v", n, currents)
		}
	}
	if y := randomMode(random).Admittance(0); y != 0 {
		t.Errorf("a motional arm conducts %v at no frequency", y)
	}
}

// TestCharacteristicFrequenciesInOrder: fm < fs < fr < fL parallel < fL series < fa < fp < fn for one mode of good figure
// of merit, and Rr and Ra near their first-order values.
func TestCharacteristicFrequenciesInOrder(t *testing.T) {
	random := rand.New(rand.NewPCG(8, 8))
	for range 300 {
		u := randomUnit(random, 1)
		u.ShuntConductanceSiemens, u.LeadInductanceHenry = 0, 0
		merit := u.FigureOfMerit()
		if merit < 30 {
			continue
		}
		fm, _, err1 := u.MaximumAdmittance()
		fr, rr, err2 := u.Resonance()
		fa, ra, err3 := u.Antiresonance()
		fn, _, err4 := u.MinimumAdmittance()
		load := u.ShuntCapacitanceFarad
		parallel, _, err5 := u.LoadResonance(load, crystal.ParallelLoad)
		series, _, err6 := u.LoadResonance(load, crystal.SeriesLoad)
		for _, err := range []error{err1, err2, err3, err4, err5, err6} {
			if err != nil {
				t.Fatalf("M %.3g: %v", merit, err)
			}
		}
		main := u.Modes[0]
		order := []float64{fm, main.ResonanceHz, fr, parallel, series, fa, u.ParallelResonanceHz(), fn}
		// At the highest Q fm and fr are less than one double away from fs.
		if !slices.IsSorted(order) {
			t.Errorf("M %.3g: out of order: %v", merit, order)
		}
		if e := rr/main.ResistanceOhm - 1 - 1/(merit*merit); math.Abs(e) > 3/math.Pow(merit, 4)+1e-12 {
			t.Errorf("M %.3g: Rr/R1 is off its first order by %g", merit, e)
		}
		b := 2 * math.Pi * u.ParallelResonanceHz() * u.ShuntCapacitanceFarad
		if e := ra*b*b*main.ResistanceOhm - 1; math.Abs(e) > 2/merit {
			t.Errorf("M %.3g: Ra is off its first order by %g", merit, e)
		}
	}
}

// TestEffectiveLoadCapacitanceInverts: the load capacitance comes back from the frequency it led to.
func TestEffectiveLoadCapacitanceInverts(t *testing.T) {
	random := rand.New(rand.NewPCG(9, 9))
	for n := range 300 {
		u := randomUnit(random, 1+n%3)
		load := u.ShuntCapacitanceFarad * math.Pow(10, 2*random.Float64()-0.5)
		for _, connection := range []crystal.LoadConnection{crystal.SeriesLoad, crystal.ParallelLoad} {
			frequency, _, err := u.LoadResonance(load, connection)
			if err != nil {
				continue
			}
			sensitivity, err := u.PullingSensitivity(load, connection)
			if err != nil {
				t.Fatal(err)
			}
			back, err := u.EffectiveLoadCapacitance(frequency, connection)
			// The frequency is rounded; the sensitivity says what that is worth in capacitance.
			rounding := 0x1p-51 / math.Abs(sensitivity)
			if err != nil || math.Abs(back-load) > rounding+1e-12*load {
				t.Errorf("unit %d, %s: %g F came back as %g F (%v)", n, connection, load, back, err)
			}
		}
		lossless := u.LosslessEffectiveLoadCapacitance(u.LosslessLoadResonanceHz(load))
		if rounding := 0x1p-51 / -u.LosslessPullingSensitivity(load); math.Abs(lossless-load) > rounding+1e-12*load {
			t.Errorf("unit %d: lossless %g F came back as %g F", n, load, lossless)
		}
	}
}

// TestPullingSensitivityIsTheDerivative compares the analytic derivative with a fourth-order difference of the offset, and the
// lossless one with a difference of the lossless offset.
func TestPullingSensitivityIsTheDerivative(t *testing.T) {
	random := rand.New(rand.NewPCG(10, 10))
	compared := 0
	for n := range 300 {
		u := randomUnit(random, 1+n%3)
		load := u.ShuntCapacitanceFarad * math.Pow(10, 2*random.Float64()-0.5)
		h := 2e-5 * load
		difference := func(offset func(float64) float64) float64 {
			return (8*(offset(load+h)-offset(load-h)) - (offset(load+2*h) - offset(load-2*h))) / (12 * h)
		}
		lossless := difference(u.LosslessLoadOffset)
		if got := u.LosslessPullingSensitivity(load); math.Abs(got-lossless) > 1e-8*math.Abs(lossless) {
			t.Errorf("unit %d, lossless: %g, want %g", n, got, lossless)
		}
		for _, connection := range []crystal.LoadConnection{crystal.SeriesLoad, crystal.ParallelLoad} {
			got, err := u.PullingSensitivity(load, connection)
			if err != nil {
				continue
			}
			want := difference(func(c float64) float64 {
				offset, err := u.LoadOffset(c, connection)
				if err != nil {
					return math.NaN()
				}
				return offset
			})
			if math.IsNaN(want) {
				continue
			}
			compared++
			// Between close modes the offset bends within the step of the difference.
			tolerance := 1e-8
			if len(u.Modes) > 1 {
				tolerance = 1e-6
			}
			if math.Abs(got-want) > tolerance*math.Abs(want) {
				t.Errorf("unit %d, %s, M %.3g: %.12g, want %.12g", n, connection, u.FigureOfMerit(), got, want)
			}
		}
	}
	if compared < 400 {
		t.Errorf("only %d derivatives compared", compared)
	}
}

// TestLoadLimits: an infinite series load is a short, a vanishing parallel load is none.
func TestLoadLimits(t *testing.T) {
	random := rand.New(rand.NewPCG(11, 11))
	for n := range 100 {
		u := randomUnit(random, 1)
		fr, rr, err := u.Resonance()
		fa, ra, errUpper := u.Antiresonance()
		if err != nil || errUpper != nil {
			t.Fatalf("unit %d: %v, %v", n, err, errUpper)
		}
		f, r, err := u.LoadResonance(1e18*u.ShuntCapacitanceFarad, crystal.SeriesLoad)
		if err != nil || math.Abs(f-fr) > 1e-15*fr || math.Abs(r-rr) > 1e-12*rr {
			t.Errorf("unit %d: series short %.17g Hz %g ohm, fr %.17g Hz %g ohm (%v)", n, f, r, fr, rr, err)
		}
		f, r, err = u.LoadResonance(1e-18*u.ShuntCapacitanceFarad, crystal.ParallelLoad)
		if err != nil || math.Abs(f-fa) > 1e-15*fa || math.Abs(r-ra) > 1e-12*ra {
			t.Errorf("unit %d: parallel open %.17g Hz %g ohm, fa %.17g Hz %g ohm (%v)", n, f, r, fa, ra, err)
		}
	}
}

// TestNeighbourOrder: the order of the modes after the first means nothing.
func TestNeighbourOrder(t *testing.T) {
	random := rand.New(rand.NewPCG(12, 12))
	for n := range 100 {
		u := randomUnit(random, 5)
		turned := u
		turned.Modes = slices.Clone(u.Modes)
		slices.Reverse(turned.Modes[1:])
		a, b := everything(u, u.ShuntCapacitanceFarad), everything(turned, u.ShuntCapacitanceFarad)
		if !slices.Equal(a.failures, b.failures) {
			t.Errorf("unit %d: %v and %v", n, a.failures, b.failures)
		}
		for k := range a.frequencies {
			if math.Abs(a.frequencies[k]-b.frequencies[k]) > 2*0x1p-52*a.frequencies[k] {
				t.Errorf("unit %d: frequency %d: %.17g and %.17g", n, k, a.frequencies[k], b.frequencies[k])
			}
		}
	}
}
