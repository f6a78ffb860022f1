package crystal

import (
	"fmt"
	"math"
)

// Unit is the equivalent circuit of a crystal unit: motional arms, shunt capacitance with its loss, and lead inductance.
//
// An estimate may carry a small C0, G0 or Ls of the wrong sign, out of noise. That is allowed: the circuit is computed with
// the numbers as they are.
type Unit struct {
	Modes                   []Mode  // Modes[0] is the main mode; the others are unwanted modes and overtones in any order
	ShuntCapacitanceFarad   float64 // C0
	ShuntConductanceSiemens float64 // G0, dielectric loss of C0 as a parallel conductance
	LeadInductanceHenry     float64 // Ls, in series with all of it
}

// Validate returns nil for a unit with at least one mode, all modes with positive finite fs, R1, L1 and all other values
// finite; else an error that wraps ErrInvalidUnit and names the field.
func (u Unit) Validate() error {
	if len(u.Modes) == 0 {
		return fmt.Errorf("%w: no mode", ErrInvalidUnit)
	}
	for k := range u.Modes {
		m := &u.Modes[k]
		switch {
		case !positiveFinite(m.ResonanceHz):
			return fmt.Errorf("%w: mode %d: resonance frequency %g Hz", ErrInvalidUnit, k, m.ResonanceHz)
		case !positiveFinite(m.ResistanceOhm):
			return fmt.Errorf("%w: mode %d: resistance %g ohm", ErrInvalidUnit, k, m.ResistanceOhm)
		case !positiveFinite(m.InductanceHenry):
			return fmt.Errorf("%w: mode %d: inductance %g H", ErrInvalidUnit, k, m.InductanceHenry)
		}
	}
	switch {
	case !finite(u.ShuntCapacitanceFarad):
		return fmt.Errorf("%w: shunt capacitance %g F", ErrInvalidUnit, u.ShuntCapacitanceFarad)
	case !finite(u.ShuntConductanceSiemens):
		return fmt.Errorf("%w: shunt conductance %g S", ErrInvalidUnit, u.ShuntConductanceSiemens)
	case !finite(u.LeadInductanceHenry):
		return fmt.Errorf("%w: lead inductance %g H", ErrInvalidUnit, u.LeadInductanceHenry)
	}
	return nil
}

func finite(v float64) bool         { return !math.IsNaN(v) && !math.IsInf(v, 0) }
func positiveFinite(v float64) bool { return v > 0 && !math.IsInf(v, 1) }

// main returns the main mode, or a mode of NaN for a unit without modes, so that every closed form answers NaN then.
func (u Unit) main() Mode {
	if len(u.Modes) == 0 {
		return Mode{math.NaN(), math.NaN(), math.NaN()}
	}
	return u.Modes[0]
}

// Admittance returns Y(f) of the whole unit in siemens, at the ends of its leads; f is not 0.
func (u Unit) Admittance(frequencyHz float64) complex128 {
	inner := u.innerAdmittance(frequencyHz)
	if u.LeadInductanceHenry == 0 {
		return inner
	}
	lead := complex(0, 2*math.Pi*frequencyHz*u.LeadInductanceHenry)
	return inner * reciprocal(1+lead*inner)
}

// Impedance returns Z(f) of the whole unit in ohm, at the ends of its leads; f is not 0.
func (u Unit) Impedance(frequencyHz float64) complex128 {
	return complex(0, 2*math.Pi*frequencyHz*u.LeadInductanceHenry) + reciprocal(u.innerAdmittance(frequencyHz))
}

// ShuntAdmittance returns G0 + j w C0 in siemens: the unit without its modes and leads.
func (u Unit) ShuntAdmittance(frequencyHz float64) complex128 {
	return complex(u.ShuntConductanceSiemens, 2*math.Pi*frequencyHz*u.ShuntCapacitanceFarad)
}

// innerAdmittance is the admittance behind the leads.
func (u Unit) innerAdmittance(frequencyHz float64) complex128 {
	sum := u.ShuntAdmittance(frequencyHz)
	for k := range u.Modes {
		sum += u.Modes[k].Admittance(frequencyHz)
	}
	return sum
}

// MotionalCurrentShare returns I1/I, the current in the main motional arm over the current into the unit.
//
//	I1/I = (1/Z1)/(G0 + j w C0 + sum 1/Zk)
//
// The leads carry all the current and do not change it. Power in R1 is |I1|^2 R1 with rms current: off resonance C0 takes
// its part, so the current into the unit is not the one that drives the crystal. Without a mode the share is NaN.
func (u Unit) MotionalCurrentShare(frequencyHz float64) complex128 {
	return u.main().Admittance(frequencyHz) * reciprocal(u.innerAdmittance(frequencyHz))
}

// FigureOfMerit returns M = Q/r = 1/(2 pi fs C0 R1) of the main mode. At M <= 2 a unit alone has no zero-phase frequency.
func (u Unit) FigureOfMerit() float64 {
	m := u.main()
	return 1 / (2 * math.Pi * m.ResonanceHz * u.ShuntCapacitanceFarad * m.ResistanceOhm)
}

// CapacitanceRatio returns r = C0/C1 of the main mode.
func (u Unit) CapacitanceRatio() float64 {
	return u.ShuntCapacitanceFarad / u.main().CapacitanceFarad()
}

// responseAtOffset returns the admittance at the ends of the leads and its derivative by frequency, at an offset from the main
// resonance. The distance of every other mode is formed from the offset as well: (fs - fk) first, which is exact for
// modes that matter, then the offset.
func (u Unit) responseAtOffset(offsetHz float64) (admittance, slope complex128) {
	reference := u.Modes[0].ResonanceHz
	frequencyHz := reference + offsetHz
	y := u.ShuntAdmittance(frequencyHz)
	dy := complex(0, 2*math.Pi*u.ShuntCapacitanceFarad)
	for k := range u.Modes {
		m := &u.Modes[k]
		distance := (reference - m.ResonanceHz) + offsetHz
		arm := reciprocal(complex(m.ResistanceOhm, m.reactance(frequencyHz, distance)))
		y += arm
		dy -= complex(0, m.reactanceSlope(frequencyHz)) * arm * arm
	}
	if u.LeadInductanceHenry == 0 {
		return y, dy
	}
	lead := complex(0, 2*math.Pi*u.LeadInductanceHenry)
	divisor := reciprocal(1 + lead*complex(frequencyHz, 0)*y)
	return y * divisor, (dy - lead*y*y) * divisor * divisor
}

// restAtOffset returns the admittance behind the leads of everything but the main arm: the surroundings of the main mode.
func (u Unit) restAtOffset(offsetHz float64) complex128 {
	reference := u.Modes[0].ResonanceHz
	frequencyHz := reference + offsetHz
	y := u.ShuntAdmittance(frequencyHz)
	for k := 1; k < len(u.Modes); k++ {
		m := &u.Modes[k]
		distance := (reference - m.ResonanceHz) + offsetHz
		y += reciprocal(complex(m.ResistanceOhm, m.reactance(frequencyHz, distance)))
	}
	return y
}

// mainTakesPart says whether the main arm carries at least half the current of any other arm at the offset. A zero-phase
// frequency of a strong neighbour inside the searched window is not one of the main mode.
//
// Half, not all: at an antiresonance between two modes their currents are opposite and nearly equal by nature, and a bound
// of one would let rounding decide.
func (u Unit) mainTakesPart(offsetHz float64) bool {
	reference := u.Modes[0].ResonanceHz
	frequencyHz := reference + offsetHz
	main := &u.Modes[0]
	own := math.Hypot(main.ResistanceOhm, main.reactance(frequencyHz, offsetHz))
	for k := 1; k < len(u.Modes); k++ {
		m := &u.Modes[k]
		distance := (reference - m.ResonanceHz) + offsetHz
		if 2*math.Hypot(m.ResistanceOhm, m.reactance(frequencyHz, distance)) < own {
			return false
		}
	}
	return true
}
