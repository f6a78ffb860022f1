package crystal

import "math"

// loadRatio returns C1/(C0 + CL).
func (u Unit) loadRatio(loadCapacitanceFarad float64) float64 {
	return u.main().CapacitanceFarad() / (u.ShuntCapacitanceFarad + loadCapacitanceFarad)
}

// LosslessLoadResonanceHz returns fL = fs sqrt(1 + C1/(C0 + CL)): the load resonance frequency of the main mode alone
// without losses, the same for both connections. Source: IEC 60122-1.
func (u Unit) LosslessLoadResonanceHz(loadCapacitanceFarad float64) float64 {
	return u.main().ResonanceHz * math.Sqrt(1+u.loadRatio(loadCapacitanceFarad))
}

// LosslessLoadOffset returns DL = sqrt(1 + a) - 1 with a = C1/(C0 + CL), as a fraction; written a/(1 + sqrt(1 + a)), which
// keeps all digits of a small offset.
func (u Unit) LosslessLoadOffset(loadCapacitanceFarad float64) float64 {
	a := u.loadRatio(loadCapacitanceFarad)
	return a / (1 + math.Sqrt(1+a))
}

// FirstOrderLoadOffset returns DL ~ C1/(2 (C0 + CL)), as a fraction; high by DL^2/2, which is 0.375 ppm at 867 ppm.
func (u Unit) FirstOrderLoadOffset(loadCapacitanceFarad float64) float64 {
	return u.loadRatio(loadCapacitanceFarad) / 2
}

// FirstOrderLoadResonanceHz returns fL ~ fs (1 + C1/(2 (C0 + CL))).
func (u Unit) FirstOrderLoadResonanceHz(loadCapacitanceFarad float64) float64 {
	return u.main().ResonanceHz * (1 + u.FirstOrderLoadOffset(loadCapacitanceFarad))
}

// FirstOrderLoadResistanceOhm returns RL ~ R1 (1 + C0/CL)^2, printed in data sheets as the ESR at CL. Source: IEC 60122-1.
func (u Unit) FirstOrderLoadResistanceOhm(loadCapacitanceFarad float64) float64 {
	step := 1 + u.ShuntCapacitanceFarad/loadCapacitanceFarad
	return u.main().ResistanceOhm * step * step
}

// LosslessEffectiveLoadCapacitance returns the load capacitance in farad that brings the main mode alone, without losses,
// to a frequency:
//
//	CLeff = C1/((f/fs)^2 - 1) - C0
//
// Infinite at fs, negative above fp and below fs.
func (u Unit) LosslessEffectiveLoadCapacitance(frequencyHz float64) float64 {
	m := u.main()
	return m.CapacitanceFarad()/squaredRatioMinusOne(frequencyHz, m.ResonanceHz) - u.ShuntCapacitanceFarad
}

// MotionalResonanceFromLoad returns the fs of a unit that resonates at fL with a load, without losses:
//
//	fs = fL/sqrt(1 + C1/(C0 + CL))
//
// With ModeFromCapacitance it makes a mode out of the nominal values of a load-calibrated part.
func MotionalResonanceFromLoad(loadResonanceHz, motionalCapacitanceFarad, shuntCapacitanceFarad, loadCapacitanceFarad float64) float64 {
	return loadResonanceHz / math.Sqrt(1+motionalCapacitanceFarad/(shuntCapacitanceFarad+loadCapacitanceFarad))
}

// MotionalCapacitanceFromLoad returns the C1 with which an arm of inductance L1 resonates at fL with a load, without losses:
//
//	C1 = 1/((2 pi fL)^2 L1 - 1/(C0 + CL))
//
// for data sheets that print L1 and the frequency at a load but no C1.
func MotionalCapacitanceFromLoad(loadResonanceHz, inductanceHenry, shuntCapacitanceFarad, loadCapacitanceFarad float64) float64 {
	angular := 2 * math.Pi * loadResonanceHz
	return 1 / (angular*angular*inductanceHenry - 1/(shuntCapacitanceFarad+loadCapacitanceFarad))
}
