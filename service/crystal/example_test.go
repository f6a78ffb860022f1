package crystal_test

import (
	"errors"
	"fmt"

	"example.com/admit/service/crystal"
)

// The part TM-12M288-F16 of the Tarnmoor works: a 12.288 MHz fundamental unit, calibrated at 16 pF. Its data sheet gives R1,
// C1, C0 and the frequency at the load; the motional resonance frequency and L1 follow.
func tarnmoor12M288() crystal.Unit {
	const motionalCapacitanceFarad, shuntCapacitanceFarad, loadCapacitanceFarad = 11e-15, 3.1e-12, 16e-12
	resonanceHz := crystal.MotionalResonanceFromLoad(12.288e6, motionalCapacitanceFarad, shuntCapacitanceFarad, loadCapacitanceFarad)
	return crystal.Unit{
		Modes:                 []crystal.Mode{crystal.ModeFromCapacitance(resonanceHz, 14, motionalCapacitanceFarad)},
		ShuntCapacitanceFarad: shuntCapacitanceFarad,
	}
}

// What a unit is made of, and how good it is.
func Example() {
	unit := tarnmoor12M288()
	main := unit.Modes[0]
	fmt.Printf("fs   %.1f Hz\n", main.ResonanceHz)
	fmt.Printf("L1   %.4f mH\n", main.InductanceHenry*1e3)
	fmt.Printf("Q    %.0f\n", main.QualityFactor())
	fmt.Printf("r    %.1f\n", unit.CapacitanceRatio())
	fmt.Printf("M    %.1f\n", unit.FigureOfMerit())
	fmt.Printf("rings for %.2f ms, in a 25 ohm network for %.2f ms\n", main.TimeConstant()*1e3, main.LoadedTimeConstant(25)*1e3)
	// Output:
	// fs   12284463.1 Hz
	// L1   15.2593 mH
	// Q    84129
	// r    281.8
	// M    298.5
	// rings for 2.18 ms, in a 25 ohm network for 0.78 ms
}

// The zero-phase frequency fr is what a pi-network in resonance shows; it lies a little above fs.
func ExampleUnit_Resonance() {
	unit := tarnmoor12M288()
	fr, rr, err := unit.Resonance()
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("fr - fs = %.3f Hz, Rr = %.4f ohm\n", fr-unit.Modes[0].ResonanceHz, rr)
	// Output:
	// fr - fs = 0.245 Hz, Rr = 14.0002 ohm
}

// A unit with M <= 2 never looks resistive. That is an answer, not a failure of the search.
func ExampleUnit_Resonance_absent() {
	unit := crystal.Unit{
		Modes:                 []crystal.Mode{crystal.ModeFromCapacitance(155.52e6, 120, 0.2e-15)},
		ShuntCapacitanceFarad: 5e-12,
	}
	_, _, err := unit.Resonance()
	fmt.Printf("M = %.2f: %t\n", unit.FigureOfMerit(), errors.Is(err, crystal.ErrNoZeroPhase))
	fm, impedance, err := unit.MaximumAdmittance()
	fmt.Printf("fm - fs = %.0f Hz, %.1f ohm, %v\n", fm-unit.Modes[0].ResonanceHz, impedance, err)
	// Output:
	// M = 1.71: true
	// fm - fs = -841 Hz, 94.4 ohm, <nil>
}

// The frequency at a load, exact and by the formulas of data sheets.
func ExampleUnit_LoadResonance() {
	unit := tarnmoor12M288()
	const load = 16e-12
	series, resistance, err := unit.LoadResonance(load, crystal.SeriesLoad)
	if err != nil {
		fmt.Println(err)
		return
	}
	parallel, _, err := unit.LoadResonance(load, crystal.ParallelLoad)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("series    %.4f Hz, RL %.4f ohm\n", series, resistance)
	fmt.Printf("lossless  %.4f Hz, RL %.4f ohm\n", unit.LosslessLoadResonanceHz(load), unit.FirstOrderLoadResistanceOhm(load))
	fmt.Printf("parallel  %.4f Hz\n", parallel)
	// Output:
	// series    12288000.2920 Hz, RL 19.9509 ohm
	// lossless  12288000.0000 Hz, RL 19.9505 ohm
	// parallel  12287998.4920 Hz
}

// How far the frequency moves with the load.
func ExampleUnit_PullingSensitivity() {
	unit := tarnmoor12M288()
	const load, perPicofarad, millionth = 16e-12, 1e-12, 1e-6
	exact, err := unit.PullingSensitivity(load, crystal.SeriesLoad)
	if err != nil {
		fmt.Println(err)
		return
	}
	pull, err := unit.PullingRange(14e-12, 18e-12, crystal.SeriesLoad)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("%.4f ppm/pF, first order %.4f ppm/pF\n", exact*perPicofarad/millionth, unit.FirstOrderPullingSensitivity(load)*perPicofarad/millionth)
	fmt.Printf("%.2f ppm from 14 pF to 18 pF\n", pull/millionth)
	// Output:
	// -15.0722 ppm/pF, first order -15.0763 ppm/pF
	// 60.96 ppm from 14 pF to 18 pF
}

// An unwanted mode close above the load resonance frequency pushes it down. Formulas that know one mode do not see that.
func ExampleUnit_LoadResonance_neighbour() {
	unit := tarnmoor12M288()
	alone, _, err := unit.LoadResonance(16e-12, crystal.SeriesLoad)
	if err != nil {
		fmt.Println(err)
		return
	}
	unit.Modes = append(unit.Modes, crystal.ModeFromCapacitance(12.2885e6, 400, 0.02e-15))
	beside, _, err := unit.LoadResonance(16e-12, crystal.SeriesLoad)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("%.2f ppm\n", (beside-alone)/alone*1e6)
	// Output:
	// -3.38 ppm
}

// Off resonance the current into the unit is not the one that drives the crystal: at the load resonance frequency the motional
// current is larger, and opposite to the part that returns through C0.
func ExampleUnit_MotionalCurrentShare() {
	unit := tarnmoor12M288()
	fL, _, err := unit.LoadResonance(16e-12, crystal.SeriesLoad)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("at fs %.4f, at fL %.4f\n", real(unit.MotionalCurrentShare(unit.Modes[0].ResonanceHz)), real(unit.MotionalCurrentShare(fL)))
	// Output:
	// at fs 1.0000, at fL 1.1938
}

// The load capacitance at which a unit would be on frequency.
func ExampleUnit_EffectiveLoadCapacitance() {
	unit := tarnmoor12M288()
	capacitance, err := unit.EffectiveLoadCapacitance(12.2881e6, crystal.SeriesLoad)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("%.3f pF\n", capacitance*1e12)
	// Output:
	// 15.476 pF
}
