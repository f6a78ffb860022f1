package crystal

import "math"

// LoadConnection says how the load capacitance is connected to the unit.
type LoadConnection string

// The two circuit conditions of IEC 60122-1. Without losses both give the same frequency; with losses the series one lies
// above it and the parallel one below, by up to some ppm for units of low figure of merit.
const (
	SeriesLoad   LoadConnection = "series"   // fL is the lower zero of the reactance of unit and CL in series
	ParallelLoad LoadConnection = "parallel" // fL is the upper zero-phase frequency of unit and CL in parallel
)

// loaded returns the circuit of a unit and a load capacitance.
func (u Unit) loaded(loadCapacitanceFarad float64, connection LoadConnection) (circuit, error) {
	c := circuit{unit: u}
	if err := u.Validate(); err != nil {
		return c, err
	}
	if !positiveFinite(loadCapacitanceFarad) {
		return c, ErrLoadCapacitance
	}
	switch connection {
	case SeriesLoad:
		c.seriesFarad = loadCapacitanceFarad
	case ParallelLoad:
		c.parallelFarad = loadCapacitanceFarad
	default:
		return c, ErrLoadConnection
	}
	return c, nil
}

// loadOffset returns fL - fs in hertz.
func (u Unit) loadOffset(loadCapacitanceFarad float64, connection LoadConnection) (offsetHz float64, err error) {
	c, err := u.loaded(loadCapacitanceFarad, connection)
	if err != nil {
		return 0, err
	}
	return c.zeroPhase(connection == SeriesLoad)
}

// LoadResonance returns the load resonance frequency fL and the load resonance resistance RL, exact with losses, leads and
// neighbours:
//
//	series:    the zero of Im(Z + 1/(j w CL)) at which the reactance rises
//	parallel:  the zero of Im(Y + j w CL) at which the circuit turns from inductive to capacitive
//	RL = Re Z(fL), of the unit itself in both cases; about R1 (1 + C0/CL)^2
//
// With neighbours it is the root nearest to the one of the main mode alone, see Resonance. ErrNoZeroPhase when there is
// none: the load is too small (or, in parallel, C0 + CL too large) for the losses; ErrLoadCapacitance and
// ErrLoadConnection for arguments out of range. Accuracy as for Resonance. Source: IEC 60122-1, definitions.
func (u Unit) LoadResonance(loadCapacitanceFarad float64, connection LoadConnection) (frequencyHz, resistanceOhm float64, err error) {
	offset, err := u.loadOffset(loadCapacitanceFarad, connection)
	if err != nil {
		return 0, 0, err
	}
	y, _ := u.responseAtOffset(offset)
	return u.Modes[0].ResonanceHz + offset, real(reciprocal(y)), nil
}

// LoadOffset returns the load resonance frequency offset DL = (fL - fs)/fs for the exact fL, as a fraction. It is formed
// from the offset itself and keeps its digits where a difference of the two frequencies would lose them.
func (u Unit) LoadOffset(loadCapacitanceFarad float64, connection LoadConnection) (fraction float64, err error) {
	offset, err := u.loadOffset(loadCapacitanceFarad, connection)
	if err != nil {
		return 0, err
	}
	return offset / u.Modes[0].ResonanceHz, nil
}

// EffectiveLoadCapacitance returns the load capacitance CLeff that makes a given frequency the load resonance frequency,
// on the admittance of the whole unit:
//
//	series:    CLeff = 1/(w Im Z(f))        parallel:  CLeff = -Im Y(f)/w
//
// ErrNotInductive where the unit is capacitive or resistive. On the branch between fr and fa that LoadResonance searches it
// is the inverse of LoadResonance; close to fa the parallel and close to fr the series value lies on the other branch or
// tends to zero or infinity.
func (u Unit) EffectiveLoadCapacitance(frequencyHz float64, connection LoadConnection) (capacitanceFarad float64, err error) {
	if err := u.Validate(); err != nil {
		return 0, err
	}
	angular := 2 * math.Pi * frequencyHz
	switch connection {
	case SeriesLoad:
		capacitanceFarad = 1 / (angular * imag(u.Impedance(frequencyHz)))
	case ParallelLoad:
		capacitanceFarad = -imag(u.Admittance(frequencyHz)) / angular
	default:
		return 0, ErrLoadConnection
	}
	if !positiveFinite(capacitanceFarad) {
		return 0, ErrNotInductive
	}
	return capacitanceFarad, nil
}
