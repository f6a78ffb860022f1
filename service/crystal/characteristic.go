package crystal

import (
	"math"
	"math/cmplx"
)

// The six characteristic frequencies of IEEE Std 177 are fm, fs, fr, fa, fp, fn. fs is Modes[0].ResonanceHz and fp a closed
// form; the other four are roots on the admittance of the whole unit. When the unit has neighbours there are several of each
// kind. Meant is the root nearest to the one the main mode has alone over the same C0, G0 and Ls, among those within twice
// its distance from fs at which the main arm carries at least half the current of any other arm.
//
// For one mode with figure of merit M well above 2 and d = fs/(2 Q M):
//
//	fm ~ fs - d     fr ~ fs + d     fa ~ fp - d     fn ~ fp + d

// Resonance returns the resonance frequency fr, at which the impedance of the unit turns from capacitive to inductive with
// no phase, and the resonance resistance Rr there; about R1 (1 + 1/M^2).
//
// A unit that never looks resistive (M <= 2 when alone) gives ErrNoZeroPhase. The frequency is correct to the last place
// for the numbers given; the offset behind it, from which Rr follows, to about 1e-15 of itself.
// Source: IEEE Std 177-1966, definitions; IEC 60122-1.
func (u Unit) Resonance() (frequencyHz, resistanceOhm float64, err error) {
	return u.zeroPhase(true)
}

// Antiresonance returns the antiresonance frequency fa, at which the impedance of the unit turns from inductive to
// capacitive with no phase, and the resistance Ra there; about 1/((2 pi fp C0)^2 R1). Errors as for Resonance.
func (u Unit) Antiresonance() (frequencyHz, resistanceOhm float64, err error) {
	return u.zeroPhase(false)
}

func (u Unit) zeroPhase(rising bool) (frequencyHz, resistanceOhm float64, err error) {
	if err := u.Validate(); err != nil {
		return 0, 0, err
	}
	c := circuit{unit: u}
	offset, err := c.zeroPhase(rising)
	if err != nil {
		return 0, 0, err
	}
	y, _ := u.responseAtOffset(offset)
	return u.Modes[0].ResonanceHz + offset, real(reciprocal(y)), nil
}

// MaximumAdmittance returns fm, the frequency at which the admittance magnitude has the maximum of the main mode, and the
// impedance magnitude there. It exists at any M, unless a stronger neighbour buries it: then ErrNoExtremum.
func (u Unit) MaximumAdmittance() (frequencyHz, impedanceMagnitudeOhm float64, err error) {
	return u.extremum(true)
}

// MinimumAdmittance returns fn, the frequency at which the admittance magnitude has the minimum of the main mode against
// C0, and the impedance magnitude there. Errors as for MaximumAdmittance.
func (u Unit) MinimumAdmittance() (frequencyHz, impedanceMagnitudeOhm float64, err error) {
	return u.extremum(false)
}

func (u Unit) extremum(maximum bool) (frequencyHz, impedanceMagnitudeOhm float64, err error) {
	if err := u.Validate(); err != nil {
		return 0, 0, err
	}
	c := circuit{unit: u}
	offset, err := c.extremum(maximum)
	if err != nil {
		return 0, 0, err
	}
	y, _ := u.responseAtOffset(offset)
	return u.Modes[0].ResonanceHz + offset, 1 / cmplx.Abs(y), nil
}

// ParallelResonanceHz returns the lossless parallel resonance frequency of the main mode alone,
//
//	fp = fs sqrt(1 + C1/C0)
//
// It is infinite without C0, NaN for a negative C0 smaller than C1 and for a unit without modes.
func (u Unit) ParallelResonanceHz() float64 {
	m := u.main()
	return m.ResonanceHz * math.Sqrt(1+m.CapacitanceFarad()/u.ShuntCapacitanceFarad)
}

// ShuntCapacitanceFromResonances returns the C0 that a unit of motional capacitance C1 has if its lossless parallel
// resonance is at fp:
//
//	C0 = C1/((fp/fs)^2 - 1) = C1 fs^2/((fp - fs)(fp + fs))
func ShuntCapacitanceFromResonances(motionalResonanceHz, parallelResonanceHz, motionalCapacitanceFarad float64) float64 {
	return motionalCapacitanceFarad / squaredRatioMinusOne(parallelResonanceHz, motionalResonanceHz)
}

// squaredRatioMinusOne returns (f/f0)^2 - 1 without the loss of digits that the plain form has near f0.
func squaredRatioMinusOne(frequencyHz, referenceHz float64) float64 {
	return (frequencyHz - referenceHz) / referenceHz * ((frequencyHz + referenceHz) / referenceHz)
}
