package crystal_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/crystal"
)

// randomMode draws an arm from watch crystals to VHF overtones: 30 kHz to 200 MHz, Q of 10^3 to 3 10^6.
func randomMode(random *rand.Rand) crystal.Mode {
	frequency := 30e3 * math.Pow(200e6/30e3, random.Float64())
	capacitance := 0.1e-15 * math.Pow(1000, random.Float64())
	quality := 1e3 * math.Pow(3000, random.Float64())
	resistance := 1 / (2 * math.Pi * frequency * capacitance * quality)
	return crystal.ModeFromCapacitance(frequency, resistance, capacitance)
}

// randomUnit draws a unit of some modes with a figure of merit of 3 to 3000, dielectric loss, leads, and neighbours from ten
// bandwidths to ten times the distance of fp away, on both sides, stronger and weaker than the main mode. The capacitance
// ratio never falls below that of the strongest coupling in quartz, about 100.
func randomUnit(random *rand.Rand, modes int) crystal.Unit {
	for {
		main := randomMode(random)
		merit := 3 * math.Pow(1000, random.Float64())
		u := crystal.Unit{
			Modes:                 []crystal.Mode{main},
			ShuntCapacitanceFarad: 1 / (2 * math.Pi * main.ResonanceHz * main.ResistanceOhm * merit),
		}
		if u.CapacitanceRatio() < 100 {
			continue
		}
		susceptance := 2 * math.Pi * main.ResonanceHz * u.ShuntCapacitanceFarad
		u.ShuntConductanceSiemens = 0.01 * random.Float64() * susceptance / merit
		u.LeadInductanceHenry = 0.1 * random.Float64() * main.ResistanceOhm / (2 * math.Pi * main.ResonanceHz)
		gap := u.ParallelResonanceHz() - main.ResonanceHz
		for len(u.Modes) < modes {
			near := 10 * main.BandwidthHz()
			distance := near * math.Pow(10*gap/near, random.Float64())
			if random.IntN(2) == 0 {
				distance = -distance
			}
			u.Modes = append(u.Modes, crystal.ModeFromCapacitance(main.ResonanceHz+distance,
				main.ResistanceOhm*math.Pow(100, random.Float64()-0.3),
				main.CapacitanceFarad()*math.Pow(100, random.Float64()-0.8)))
		}
		return u
	}
}

// TestReactanceUlp compares the reactance with wL - 1/(wC) in 300-bit arithmetic, from a relative offset of 10^-15 to a
// decade away. The plain formula in doubles, beside it, must fail the same bound: else the test would show nothing.
func TestReactanceUlp(t *testing.T) {
	const bound = 4.0
	random := rand.New(rand.NewPCG(1, 1))
	worst, worstPlain := 0.0, 0.0
	for range 20000 {
		m := randomMode(random)
		offset := m.ResonanceHz * math.Pow(10, -15+16*random.Float64())
		if random.IntN(2) == 0 {
			offset = -offset / 16
		}
		frequency := m.ResonanceHz + offset
		if frequency <= 0 || frequency == m.ResonanceHz {
			continue
		}
		want := plainReactance(m, number(frequency))
		if e := ulps(m.ReactanceOhm(frequency), want); e > worst {
			worst = e
		}
		w := 2 * math.Pi * frequency
		if e := ulps(w*m.InductanceHenry-1/(w*m.CapacitanceFarad()), want); e > worstPlain {
			worstPlain = e
		}
		// The offset form stays exact where the frequency itself has run out of digits.
		tiny := offset * 1e-9
		if e := ulps(m.ReactanceAtOffsetOhm(tiny), plainReactance(m, sum(number(m.ResonanceHz), number(tiny)))); e > worst {
			worst = e
		}
	}
	t.Logf("worst error %.2f ulp; plain formula %.3g ulp", worst, worstPlain)
	if worst > bound {
		t.Errorf("worst error %.2f ulp, want at most %g", worst, bound)
	}
	if worstPlain < 1e6 {
		t.Errorf("the plain formula errs by %g ulp only: offsets too large to test cancellation", worstPlain)
	}
}

// zeroPhaseSearches lists the searches for a zero-phase frequency of a unit and the definition each must fulfil.
func zeroPhaseSearches(u crystal.Unit, load float64) []struct {
	name       string
	rising     bool
	load       float64
	connection crystal.LoadConnection
	search     func() (float64, float64, error)
} {
	at := func(connection crystal.LoadConnection) func() (float64, float64, error) {
		return func() (float64, float64, error) { return u.LoadResonance(load, connection) }
	}
	return []struct {
		name       string
		rising     bool
		load       float64
		connection crystal.LoadConnection
		search     func() (float64, float64, error)
	}{
		{"resonance", true, 0, "", u.Resonance},
		{"antiresonance", false, 0, "", u.Antiresonance},
		{"series load", true, load, crystal.SeriesLoad, at(crystal.SeriesLoad)},
		{"parallel load", false, load, crystal.ParallelLoad, at(crystal.ParallelLoad)},
	}
}

// TestZeroPhaseAgainstDefinition holds every zero-phase frequency of random units, alone and among neighbours, to the plain
// definition: it must lie within two units in the last place of a sign change in the right direction. Offset and resistance
// are then compared with the 300-bit root.
func TestZeroPhaseAgainstDefinition(t *testing.T) {
	const offsetTolerance, resistanceTolerance = 1e-14, 1e-12
	random := rand.New(rand.NewPCG(2, 2))
	found, absent := 0, 0
	worstOffset, worstResistance := 0.0, 0.0
	units, fewest := 300, 1000
	if testing.Short() {
		units, fewest = 75, 250
	}
	for n := range units {
		u := randomUnit(random, 1+n%5)
		load := u.ShuntCapacitanceFarad * math.Pow(10, 2*random.Float64()-0.5)
		for _, s := range zeroPhaseSearches(u, load) {
			where := fmt.Sprintf("unit %d, %s", n, s.name)
			frequency, resistance, err := s.search()
			if err == crystal.ErrNoZeroPhase {
				absent++
				continue
			}
			if err != nil {
				t.Fatalf("%s: %v", where, err)
			}
			found++
			root, ok := plainRoot(plainPhase(u, s.load, s.connection), frequency, s.rising)
			if !ok {
				t.Errorf("%s: %.17g Hz is no zero-phase frequency", where, frequency)
				continue
			}
			worstResistance = math.Max(worstResistance, relativeError(resistance, plainImpedance(u, root).re))
			if s.load != 0 {
				offset, err := u.LoadOffset(s.load, s.connection)
				if err != nil {
					t.Fatal(err)
				}
				reference := number(u.Modes[0].ResonanceHz)
				worstOffset = math.Max(worstOffset, relativeError(offset, quot(diff(root, reference), reference)))
			}
		}
	}
	t.Logf("%d found, %d absent; worst relative error of an offset %.2g, of a resistance %.2g", found, absent, worstOffset, worstResistance)
	if worstOffset > offsetTolerance || worstResistance > resistanceTolerance {
		t.Errorf("worst offset %g, want %g; worst resistance %g, want %g", worstOffset, offsetTolerance, worstResistance, resistanceTolerance)
	}
	if found < fewest {
		t.Errorf("only %d roots: the units drawn do not test the search", found)
	}
}

// TestExtremaAgainstDefinition does the same for the maximum and the minimum of the admittance magnitude.
func TestExtremaAgainstDefinition(t *testing.T) {
	random := rand.New(rand.NewPCG(3, 3))
	units, found := 150, 0
	if testing.Short() {
		units = 40
	}
	for n := range units {
		u := randomUnit(random, 1+n%4)
		for _, maximum := range []bool{true, false} {
			search := u.MinimumAdmittance
			if maximum {
				search = u.MaximumAdmittance
			}
			frequency, magnitude, err := search()
			if err == crystal.ErrNoExtremum {
				continue
			}
			if err != nil {
				t.Fatal(err)
			}
			found++
			root, ok := plainRoot(plainSlope(u), frequency, !maximum)
			if !ok {
				t.Errorf("unit %d, maximum %v: %.17g Hz is no extremum", n, maximum, frequency)
				continue
			}
			squared := plainImpedance(u, root).squared()
			if e := relativeError(magnitude*magnitude, squared); e > 1e-12 {
				t.Errorf("unit %d, maximum %v: impedance magnitude off by %g", n, maximum, e/2)
			}
		}
	}
	t.Logf("%d extrema", found)
	if found < 3*units/2 {
		t.Errorf("only %d extrema: the units drawn do not test the search", found)
	}
}

// TestZeroPhaseThreshold crosses the figure of merit at which the pair of zero-phase frequencies meets and vanishes: M = 2, taken
// at the frequency where they meet, half a bandwidth above fs.
func TestZeroPhaseThreshold(t *testing.T) {
	for _, above := range []float64{1e-1, 1e-3, 1e-5, 1e-7, 1e-8} {
		for _, side := range []float64{1, -1} {
			m := crystal.ModeFromCapacitance(100e6, 60, 0.5e-15)
			meetHz := m.ResonanceHz + m.BandwidthHz()/2
			u := crystal.Unit{Modes: []crystal.Mode{m},
				ShuntCapacitanceFarad: 1 / (2 * math.Pi * meetHz * m.ResistanceOhm * (2 + side*above))}
			fr, rr, errLower := u.Resonance()
			fa, ra, errUpper := u.Antiresonance()
			if side < 0 {
				if errLower != crystal.ErrNoZeroPhase || errUpper != crystal.ErrNoZeroPhase {
					t.Errorf("M = 2 - %g: errors %v and %v", above, errLower, errUpper)
				}
				continue
			}
			if errLower != nil || errUpper != nil {
				t.Errorf("M = 2 + %g: errors %v and %v", above, errLower, errUpper)
				continue
			}
			// To first order they part by B sqrt(M - 2) around the meeting point; both resistances are 2 R1 there.
			half := m.BandwidthHz() / 2 * math.Sqrt(above)
			if math.Abs((meetHz-fr)/half-1) > 0.3 || math.Abs((fa-meetHz)/half-1) > 0.3 {
				t.Errorf("M = 2 + %g: fr %.6f Hz and fa %.6f Hz around %.6f Hz, want %.6f Hz either way", above, fr, fa, meetHz, half)
			}
			if math.Abs(rr/(2*m.ResistanceOhm)-1) > 2*math.Sqrt(above) || math.Abs(ra/(2*m.ResistanceOhm)-1) > 2*math.Sqrt(above) {
				t.Errorf("M = 2 + %g: Rr %.6f ohm, Ra %.6f ohm, want about %.6f ohm", above, rr, ra, 2*m.ResistanceOhm)
			}
		}
	}
}

// TestCancellationInCapacitances: the capacitance from two close frequencies, against 300-bit arithmetic. The plain
// C1/((f/fs)^2 - 1) in doubles must fail.
func TestCancellationInCapacitances(t *testing.T) {
	const bound = 4.0
	random := rand.New(rand.NewPCG(16, 16))
	worst, worstPlain := 0.0, 0.0
	for range 5000 {
		fs := 1e6 * (1 + 99*random.Float64())
		f := fs * (1 + math.Pow(10, -12+10*random.Float64()))
		ratio := quot(number(f), number(fs))
		want := quot(number(1e-14), diff(prod(ratio, ratio), number(1)))
		worst = math.Max(worst, ulps(crystal.ShuntCapacitanceFromResonances(fs, f, 1e-14), want))
		worstPlain = math.Max(worstPlain, ulps(1e-14/(f/fs*(f/fs)-1), want))
	}
	t.Logf("worst error %.2f ulp; plain formula %.3g ulp", worst, worstPlain)
	if worst > bound || worstPlain < 1000 {
		t.Errorf("worst error %.2f ulp, want at most %g; plain formula %g ulp, want many", worst, bound, worstPlain)
	}
}
