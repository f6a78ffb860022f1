package network

import (
	"fmt"
	"math"
	"math/cmplx"

	"example.com/admit/service/crystal"
	"example.com/admit/service/sweep"
)

// Drive is how a source drives the unit through a network: a Thevenin voltage behind the termination. Powers in watt, currents in ampere, both
// rms; source power is the available power at the fixture's input port in dBm, as the station states it.
//
// A source of available power P behind Z0 has the EMF E = sqrt(4 P Z0), rms. In a symmetric reciprocal network let one side turn E into the
// open voltage Vth = h E at the unit. The short carries h E/Zt. By reciprocity a current I into the unit's side of the other half gives
// h Z0 I at its port, so that Ts = 2 V/E = 2 Z0 h^2/Zt, and
//
//	Vth = E sqrt(Ts Zt/(2 Z0))
//
// which is 0.0912110 V/V for the pi-network. Raw samples of a short carry gains of cable and receiver as well, so the absolute level
// takes Ts Zt from the nominal network, and only the termination from solved terms. Derivation ours; TestDriveTransferOfCircuits.
type Drive struct {
	ReferenceImpedanceOhm float64 // Z0 of the source
	TerminationOhm        float64 // Zt, as the unit sees it where no terms are at hand
	OpenVoltagePerEMF     float64 // Vth/E; 1 for a reflection port
	LevelOffsetDB         float64 // true source power = stated + offset
	LevelUncertaintyDB    float64 // standard uncertainty of the true source power
}

// Drive returns how the source drives a unit in this calibration's network; ErrUnknownNetwork when nobody knows the circuit.
func (c *Calibration) Drive() (Drive, error) {
	d := Drive{
		ReferenceImpedanceOhm: c.referenceImpedanceOhm(),
		TerminationOhm:        c.terminationOhm(),
		OpenVoltagePerEMF:     1,
		LevelOffsetDB:         c.SourceLevelOffsetDB,
		LevelUncertaintyDB:    c.SourceLevelUncertaintyDB,
	}
	if c.Network == Reflection {
		return d, nil
	}
	circuit, ok := c.Network.Circuit(d.ReferenceImpedanceOhm, d.TerminationOhm)
	if !ok {
		return Drive{}, fmt.Errorf("network: power in a unit: %w", ErrUnknownNetwork)
	}
	d.OpenVoltagePerEMF = math.Sqrt(math.Abs(circuit.ShortTransmission()*circuit.TerminationOhm()) / (2 * d.ReferenceImpedanceOhm))
	return d, nil
}

// OpenVoltage returns the rms Thevenin voltage at the unit.
func (d Drive) OpenVoltage(sourcePowerDBm float64) float64 {
	watt := 1e-3 * math.Pow(10, (sourcePowerDBm+d.LevelOffsetDB)/10)
	return d.OpenVoltagePerEMF * math.Sqrt(4*watt*d.ReferenceImpedanceOhm)
}

// PowerInResistanceWatt returns I^2 R: the drive level, from the rms motional current. Peak currents would give twice as much.
func PowerInResistanceWatt(currentAmpere, resistanceOhm float64) float64 {
	return currentAmpere * currentAmpere * resistanceOhm
}

// MotionalCurrentAmpere returns the rms current in the main motional arm at a frequency,
//
//	I1 = V/Z1 = Vth Y/(1 + Zt Y) * I1/I
//
// with V the voltage across the arm. Off resonance it is less than the unit's current, of which C0 takes its part.
func (d Drive) MotionalCurrentAmpere(sourcePowerDBm float64, unit crystal.Unit, frequencyHz float64) float64 {
	return d.motionalCurrent(sourcePowerDBm, unit, frequencyHz, complex(d.TerminationOhm, 0))
}

func (d Drive) motionalCurrent(sourcePowerDBm float64, unit crystal.Unit, frequencyHz float64, terminationOhm complex128) float64 {
	y := unit.Admittance(frequencyHz)
	return d.OpenVoltage(sourcePowerDBm) * cmplx.Abs(y/(1+terminationOhm*y)*unit.MotionalCurrentShare(frequencyHz))
}

// PowerWatt returns the rms power in R1 of the unit's main mode at a frequency, at and off resonance.
func (d Drive) PowerWatt(sourcePowerDBm float64, unit crystal.Unit, frequencyHz float64) float64 {
	return PowerInResistanceWatt(d.MotionalCurrentAmpere(sourcePowerDBm, unit, frequencyHz), unit.Modes[0].ResistanceOhm)
}

// PowerAtPointWatt returns the same at point i of solved terms, with the termination that was found there. Terms of samples that are
// admittances or impedances know no termination; then the nominal one counts.
func (d Drive) PowerAtPointWatt(sourcePowerDBm float64, unit crystal.Unit, terms *Terms, i int) float64 {
	termination := complex(d.TerminationOhm, 0)
	if terms.D == 1 && terms.C[i] != 0 {
		termination = terms.C[i]
	}
	return PowerInResistanceWatt(d.motionalCurrent(sourcePowerDBm, unit, terms.FrequencyHz[i], termination), unit.Modes[0].ResistanceOhm)
}

// HighestPowerWatt returns the highest rms power in R1 over the points of a sweep and the index of that point. terms are at the sweep's
// frequencies, or nil for the nominal termination. A sweep that does not state its source power is an error.
func (d Drive) HighestPowerWatt(s *sweep.Sweep, terms *Terms, unit crystal.Unit) (watt float64, point int, err error) {
	if s.SourcePowerDBm == nil {
		return 0, 0, fmt.Errorf("network: power in a unit: the sweep states no source power")
	}
	for i, f := range s.FrequencyHz {
		var p float64
		if terms == nil {
			p = d.PowerWatt(*s.SourcePowerDBm, unit, f)
		} else {
			p = d.PowerAtPointWatt(*s.SourcePowerDBm, unit, terms, i)
		}
		if p > watt {
			watt, point = p, i
		}
	}
	return watt, point, nil
}

// PowerAtResonanceWatt returns Vth^2 R1/(R1 + Zt)^2, the power in R1 at series resonance with C0 left out.
func (d Drive) PowerAtResonanceWatt(sourcePowerDBm, resistanceOhm float64) float64 {
	return PowerInResistanceWatt(d.CurrentAtResonanceAmpere(sourcePowerDBm, resistanceOhm), resistanceOhm)
}

// CurrentAtResonanceAmpere returns Vth/(R1 + Zt), the motional current at series resonance with C0 left out. The lowest R1 takes the most.
func (d Drive) CurrentAtResonanceAmpere(sourcePowerDBm, resistanceOhm float64) float64 {
	return d.OpenVoltage(sourcePowerDBm) / (resistanceOhm + d.TerminationOhm)
}

// WorstPowerWatt returns the highest power in R1 at resonance for any R1 from lowOhm to highOhm, and the R1 that takes it: Zt where
// that lies in the interval, else the end nearer to it. A drive ceiling is held against this before the first sample.
func (d Drive) WorstPowerWatt(sourcePowerDBm, lowOhm, highOhm float64) (watt, resistanceOhm float64) {
	resistanceOhm = math.Min(math.Max(d.TerminationOhm, lowOhm), highOhm)
	return d.PowerAtResonanceWatt(sourcePowerDBm, resistanceOhm), resistanceOhm
}

// SourcePowerDBm returns the source power to state for a wanted power in R1 at resonance; minus infinity for none.
//
//	P = I^2 (R1 + Zt)^2/(4 Z0 h^2) with I^2 = power/R1
func (d Drive) SourcePowerDBm(powerWatt, resistanceOhm float64) float64 {
	emf := math.Sqrt(powerWatt/resistanceOhm) * (resistanceOhm + d.TerminationOhm) / d.OpenVoltagePerEMF
	return 10*math.Log10(emf*emf/(4*d.ReferenceImpedanceOhm)/1e-3) - d.LevelOffsetDB
}

// RelativePowerUncertainty returns the relative standard uncertainty of any power given here that comes from the source level.
func (d Drive) RelativePowerUncertainty() float64 { return math.Ln10 / 10 * d.LevelUncertaintyDB }
