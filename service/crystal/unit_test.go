package crystal_test

import (
	"errors"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"example.com/admit/service/crystal"
)

// TestTimeConstants holds bandwidths and time constants at round values.
func TestTimeConstants(t *testing.T) {
	const definition = "definitions B = fs/Q and tau = Q/(pi fs), evaluated by hand to four digits"
	for _, c := range []struct {
		name, source                          string
		frequencyHz, quality                  float64
		bandwidthHz, timeConstant, settlingPM float64
	}{
		{"fork", definition, 32768, 80000, 0.4096, 0.7771, 10.7},
		{"fundamental", definition, 10e6, 100000, 100, 3.183e-3, 44.0e-3},
		{"overtone", definition, 100e6, 100000, 1000, 0.3183e-3, 4.40e-3},
	} {
		if c.source == "" {
			t.Errorf("%s: no source", c.name)
		}
		const resistance = 50
		m := crystal.Mode{ResonanceHz: c.frequencyHz, ResistanceOhm: resistance,
			InductanceHenry: c.quality * resistance / (2 * math.Pi * c.frequencyHz)}
		checkDigits(t, c.name+" Q", m.QualityFactor(), c.quality, 12)
		checkDigits(t, c.name+" bandwidth", m.BandwidthHz(), c.bandwidthHz, 4)
		checkDigits(t, c.name+" time constant", m.TimeConstant(), c.timeConstant, 4)
		checkDigits(t, c.name+" settling to 1 ppm", math.Log(1e6)*m.TimeConstant(), c.settlingPM, 3)
		// 10 ohm in 25 ohm settles 3.5 times faster than it rings freely: here 50 ohm in 125 ohm.
		checkDigits(t, c.name+" loaded", m.TimeConstant()/m.LoadedTimeConstant(125), 3.5, 12)
		checkDigits(t, c.name+" loaded", m.LoadedBandwidthHz(125)/m.BandwidthHz(), 3.5, 12)
		checkDigits(t, c.name+" loaded", m.QualityFactor()/m.LoadedQualityFactor(125), 3.5, 12)
	}
}

// TestModeConstructors: the three ways to name a mode agree.
func TestModeConstructors(t *testing.T) {
	random := rand.New(rand.NewPCG(13, 13))
	for range 1000 {
		m := randomMode(random)
		c := m.CapacitanceFarad()
		for _, other := range []crystal.Mode{
			crystal.ModeFromInductanceCapacitance(m.ResistanceOhm, m.InductanceHenry, c),
			crystal.ModeFromCapacitance(m.ResonanceHz, m.ResistanceOhm, c),
		} {
			if math.Abs(other.ResonanceHz-m.ResonanceHz) > 4*0x1p-52*m.ResonanceHz ||
				math.Abs(other.InductanceHenry-m.InductanceHenry) > 8*0x1p-52*m.InductanceHenry || other.ResistanceOhm != m.ResistanceOhm {
				t.Errorf("%v became %v", m, other)
			}
		}
		// Nominal values at a load give back the load resonance.
		u := crystal.Unit{Modes: []crystal.Mode{m}, ShuntCapacitanceFarad: 300 * c}
		load := 500 * c
		fL := u.LosslessLoadResonanceHz(load)
		if fs := crystal.MotionalResonanceFromLoad(fL, c, 300*c, load); math.Abs(fs-m.ResonanceHz) > 4*0x1p-52*fs {
			t.Errorf("fs %.17g, want %.17g", fs, m.ResonanceHz)
		}
		// C1 comes back as the difference of two reactances: L1 and the load, 1/800 of it here.
		if c1 := crystal.MotionalCapacitanceFromLoad(fL, m.InductanceHenry, 300*c, load); math.Abs(c1-c) > 1e-14*c {
			t.Errorf("C1 %.17g, want %.17g", c1, c)
		}
	}
}

// TestLeadInductanceShiftsResonance: 5 nH on 6.33 mH is -0.39 ppm, -Ls/(2 L1). Without C0, which makes it 3/M^2 larger.
func TestLeadInductanceShiftsResonance(t *testing.T) {
	u := crystal.Unit{Modes: []crystal.Mode{{ResonanceHz: 100e6, ResistanceOhm: 50, InductanceHenry: 6.33e-3}}}
	without, _, err := u.Resonance()
	if err != nil {
		t.Fatal(err)
	}
	u.LeadInductanceHenry = 5e-9
	with, _, err := u.Resonance()
	if err != nil {
		t.Fatal(err)
	}
	checkDigits(t, "shift in ppm", (without-with)/without*1e6, 0.3949, 4)
}

// TestMissingRoots: what does not exist is said to be absent, and why.
func TestMissingRoots(t *testing.T) {
	lowMerit := crystal.Unit{Modes: []crystal.Mode{crystal.ModeFromCapacitance(155e6, 120, 0.2e-15)}, ShuntCapacitanceFarad: 5e-12}
	good := crystal.Unit{Modes: []crystal.Mode{crystal.ModeFromCapacitance(10e6, 10, 20e-15)}, ShuntCapacitanceFarad: 5e-12}
	noShunt := crystal.Unit{Modes: good.Modes}
	buried := good
	buried.Modes = []crystal.Mode{crystal.ModeFromCapacitance(10e6, 1000, 0.2e-15), crystal.ModeFromCapacitance(10e6+20, 10, 20e-15)}
	for _, c := range []struct {
		name   string
		search func() (float64, float64, error)
		want   error
	}{
		{"low merit", lowMerit.Resonance, crystal.ErrNoZeroPhase},
		{"low merit", lowMerit.Antiresonance, crystal.ErrNoZeroPhase},
		{"low merit", lowMerit.MaximumAdmittance, nil},
		{"low merit", lowMerit.MinimumAdmittance, nil},
		{"low merit, load", func() (float64, float64, error) { return lowMerit.LoadResonance(10e-12, crystal.SeriesLoad) }, crystal.ErrNoZeroPhase},
		{"no C0", noShunt.Resonance, nil},
		{"no C0", noShunt.Antiresonance, crystal.ErrNoZeroPhase},
		{"no C0", noShunt.MaximumAdmittance, nil},
		{"no C0", noShunt.MinimumAdmittance, crystal.ErrNoExtremum},
		{"no C0, parallel load", func() (float64, float64, error) { return noShunt.LoadResonance(10e-12, crystal.ParallelLoad) }, nil},
		{"load too large in parallel", func() (float64, float64, error) { return good.LoadResonance(1e-9, crystal.ParallelLoad) }, crystal.ErrNoZeroPhase},
		{"load too small in series", func() (float64, float64, error) { return good.LoadResonance(1e-15, crystal.SeriesLoad) }, crystal.ErrNoZeroPhase},
		{"buried", buried.MaximumAdmittance, crystal.ErrNoExtremum},
		{"no load", func() (float64, float64, error) { return good.LoadResonance(0, crystal.SeriesLoad) }, crystal.ErrLoadCapacitance},
		{"NaN load", func() (float64, float64, error) { return good.LoadResonance(math.NaN(), crystal.SeriesLoad) }, crystal.ErrLoadCapacitance},
		{"infinite load", func() (float64, float64, error) { return good.LoadResonance(math.Inf(1), crystal.SeriesLoad) }, crystal.ErrLoadCapacitance},
		{"no connection", func() (float64, float64, error) { return good.LoadResonance(1e-12, "") }, crystal.ErrLoadConnection},
	} {
		frequency, resistance, err := c.search()
		if !errors.Is(err, c.want) {
			t.Errorf("%s: %v, want %v", c.name, err, c.want)
		}
		if err == nil && !(frequency > 0 && resistance > 0) {
			t.Errorf("%s: %g Hz, %g ohm", c.name, frequency, resistance)
		}
	}
	for _, frequency := range []float64{9e6, 10e6, 10.1e6} {
		for _, connection := range []crystal.LoadConnection{crystal.SeriesLoad, crystal.ParallelLoad} {
			if _, err := good.EffectiveLoadCapacitance(frequency, connection); err != crystal.ErrNotInductive {
				t.Errorf("%g Hz, %s: %v", frequency, connection, err)
			}
		}
	}
}

// TestInvalidUnits: each impossible value is refused by name, and no search returns a number for it.
func TestInvalidUnits(t *testing.T) {
	valid := func() crystal.Unit {
		return crystal.Unit{Modes: []crystal.Mode{{10e6, 10, 10e-3}, {10.1e6, 100, 1}}, ShuntCapacitanceFarad: 3e-12}
	}
	if err := valid().Validate(); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		names string
		spoil func(*crystal.Unit)
	}{
		{"no mode", func(u *crystal.Unit) { u.Modes = nil }},
		{"mode 0: resonance", func(u *crystal.Unit) { u.Modes[0].ResonanceHz = 0 }},
		{"mode 0: resistance", func(u *crystal.Unit) { u.Modes[0].ResistanceOhm = -1 }},
		{"mode 1: resistance", func(u *crystal.Unit) { u.Modes[1].ResistanceOhm = math.NaN() }},
		{"mode 1: inductance", func(u *crystal.Unit) { u.Modes[1].InductanceHenry = math.Inf(1) }},
		{"shunt capacitance", func(u *crystal.Unit) { u.ShuntCapacitanceFarad = math.NaN() }},
		{"shunt conductance", func(u *crystal.Unit) { u.ShuntConductanceSiemens = math.Inf(-1) }},
		{"lead inductance", func(u *crystal.Unit) { u.LeadInductanceHenry = math.NaN() }},
	} {
		u := valid()
		c.spoil(&u)
		_, _, err1 := u.Resonance()
		_, _, err2 := u.MinimumAdmittance()
		_, _, err3 := u.LoadResonance(10e-12, crystal.SeriesLoad)
		_, err4 := u.LoadOffset(10e-12, crystal.ParallelLoad)
		_, err5 := u.PullingSensitivity(10e-12, crystal.ParallelLoad)
		_, err6 := u.PullingRange(10e-12, 20e-12, crystal.SeriesLoad)
		_, err7 := u.EffectiveLoadCapacitance(10.005e6, crystal.SeriesLoad)
		for k, err := range []error{u.Validate(), err1, err2, err3, err4, err5, err6, err7} {
			if !errors.Is(err, crystal.ErrInvalidUnit) || !strings.Contains(err.Error(), c.names) {
				t.Errorf("%s, call %d: %v", c.names, k, err)
			}
		}
	}
	empty := crystal.Unit{ShuntCapacitanceFarad: 1e-12}
	for k, v := range []float64{empty.FigureOfMerit(), empty.CapacitanceRatio(), empty.ParallelResonanceHz(),
		empty.LosslessLoadResonanceHz(1e-12), empty.FirstOrderPullingSensitivity(1e-12), real(empty.MotionalCurrentShare(1e6))} {
		if !math.IsNaN(v) {
			t.Errorf("closed form %d of a unit without modes: %g", k, v)
		}
	}
}

// TestExtremeNumbersEnd: numbers at the ends of the range of a double give a result or a sentinel, in bounded time.
func TestExtremeNumbersEnd(t *testing.T) {
	sizes := []float64{5e-324, 1e-300, 1e-100, 1e-12, 1, 1e12, 1e100, 1e300}
	for _, frequency := range sizes {
		for _, resistance := range sizes {
			for _, inductance := range sizes {
				for _, capacitance := range []float64{-1e-12, 0, 5e-324, 1e-12, 1, 1e300} {
					u := crystal.Unit{Modes: []crystal.Mode{{frequency, resistance, inductance}, {2 * frequency, 1, 1e-3}},
						ShuntCapacitanceFarad: capacitance}
					everything(u, 1e-12)
				}
			}
		}
	}
}

// TestNothingAllocates, errors of absent roots included.
func TestNothingAllocates(t *testing.T) {
	random := rand.New(rand.NewPCG(14, 14))
	for _, modes := range []int{1, 5} {
		u := randomUnit(random, modes)
		load := 3 * u.ShuntCapacitanceFarad
		var total float64
		allocations := testing.AllocsPerRun(20, func() {
			for _, f := range [...]func() (float64, float64, error){u.Resonance, u.Antiresonance, u.MaximumAdmittance, u.MinimumAdmittance} {
				value, _, _ := f()
				total += value
			}
			for _, connection := range [...]crystal.LoadConnection{crystal.SeriesLoad, crystal.ParallelLoad} {
				frequency, _, _ := u.LoadResonance(load, connection)
				offset, _ := u.LoadOffset(load, connection)
				sensitivity, _ := u.PullingSensitivity(load, connection)
				pull, _ := u.PullingRange(load, 2*load, connection)
				effective, _ := u.EffectiveLoadCapacitance(frequency, connection)
				_, _, err := u.LoadResonance(1e-6*load, connection)
				if err == crystal.ErrNoZeroPhase {
					total++
				}
				total += frequency + offset + sensitivity + pull + effective
			}
			total += real(u.Admittance(1e6)+u.Impedance(1e6)+u.MotionalCurrentShare(1e6)) + u.FigureOfMerit() + u.CapacitanceRatio()
			total += u.ParallelResonanceHz() + u.LosslessLoadResonanceHz(load) + u.FirstOrderPullingRange(load, 2*load)
		})
		if allocations != 0 {
			t.Errorf("%d modes: %g allocations", modes, allocations)
		}
	}
}
