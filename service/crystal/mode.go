package crystal

import "math"

// Mode is one motional arm: R1, L1 and C1 in series. The motional capacitance is kept as the resonance frequency, because
// everything near resonance depends on f - fs, which cannot be had from L1 and C1 in double precision.
type Mode struct {
	ResonanceHz     float64 // fs, motional (series) resonance frequency; positive
	ResistanceOhm   float64 // R1, motional resistance; positive
	InductanceHenry float64 // L1, motional inductance; positive
}

// ModeFromInductanceCapacitance returns the mode of R1, L1 and C1, with
//
//	fs = 1/(2 pi sqrt(L1 C1))
//
// accurate to 2 ulp of fs. Arguments are positive; others give NaN or infinity.
func ModeFromInductanceCapacitance(resistanceOhm, inductanceHenry, capacitanceFarad float64) Mode {
	return Mode{
		ResonanceHz:     1 / (2 * math.Pi * math.Sqrt(inductanceHenry*capacitanceFarad)),
		ResistanceOhm:   resistanceOhm,
		InductanceHenry: inductanceHenry,
	}
}

// ModeFromCapacitance returns the mode of fs, R1 and C1, with
//
//	L1 = 1/((2 pi fs)^2 C1)
func ModeFromCapacitance(resonanceHz, resistanceOhm, capacitanceFarad float64) Mode {
	return Mode{
		ResonanceHz:     resonanceHz,
		ResistanceOhm:   resistanceOhm,
		InductanceHenry: resonantPartner(resonanceHz, capacitanceFarad),
	}
}

// CapacitanceFarad returns the motional capacitance C1 = 1/((2 pi fs)^2 L1).
func (m Mode) CapacitanceFarad() float64 {
	return resonantPartner(m.ResonanceHz, m.InductanceHenry)
}

// resonantPartner returns the capacitance that resonates with an inductance, or the inductance with a capacitance.
func resonantPartner(frequencyHz, inductanceOrCapacitance float64) float64 {
	angular := 2 * math.Pi * frequencyHz
	return 1 / (angular * angular * inductanceOrCapacitance)
}

// QualityFactor returns the unloaded quality factor Q = 2 pi fs L1/R1.
func (m Mode) QualityFactor() float64 {
	return m.LoadedQualityFactor(0)
}

// LoadedQualityFactor returns QL = 2 pi fs L1/(R1 + 2RT), the quality factor in a fixture.
// terminationOhm is 2RT: the resistance of both sides together, as the unit sees it (25 ohm in a nominal pi-network).
func (m Mode) LoadedQualityFactor(terminationOhm float64) float64 {
	return 2 * math.Pi * m.ResonanceHz * m.InductanceHenry / (m.ResistanceOhm + terminationOhm)
}

// TimeConstant returns tau = 2 L1/R1 = Q/(pi fs) in seconds: the time in which the free oscillation's amplitude falls to
// 1/e. Its energy falls twice as fast.
func (m Mode) TimeConstant() float64 {
	return m.LoadedTimeConstant(0)
}

// LoadedTimeConstant returns 2 L1/(R1 + 2RT) in seconds, the amplitude time constant in a fixture; terminationOhm is 2RT.
// It neglects the current that C0 takes from the termination: right where 2RT is small against 1/(w C0).
func (m Mode) LoadedTimeConstant(terminationOhm float64) float64 {
	return 2 * m.InductanceHenry / (m.ResistanceOhm + terminationOhm)
}

// BandwidthHz returns B = fs/Q = R1/(2 pi L1), the width of the conductance peak at half its height.
func (m Mode) BandwidthHz() float64 {
	return m.LoadedBandwidthHz(0)
}

// LoadedBandwidthHz returns (R1 + 2RT)/(2 pi L1), the width in a fixture; terminationOhm is 2RT.
func (m Mode) LoadedBandwidthHz(terminationOhm float64) float64 {
	return (m.ResistanceOhm + terminationOhm) / (2 * math.Pi * m.InductanceHenry)
}

// ReactanceOhm returns the reactance of the motional arm,
//
//	X(f) = w L1 - 1/(w C1) = 2 pi L1 (f - fs)(f + fs)/f
//
// at any f but 0, where it is minus infinity from above. X is odd in f, so that the admittance obeys Y(-f) = conj Y(f).
// Between fs/2 and 2 fs the factor (f - fs) has no rounding error at all (Sterbenz), and X is good to 4 ulp at any
// distance from resonance. Rearrangement ours; TestReactanceUlp.
func (m Mode) ReactanceOhm(frequencyHz float64) float64 {
	if frequencyHz < 0 {
		return -m.ReactanceOhm(-frequencyHz) // odd to the last bit
	}
	return m.reactance(frequencyHz, frequencyHz-m.ResonanceHz)
}

// ReactanceAtOffsetOhm returns the reactance of the motional arm at f = fs + offset,
//
//	X = 2 pi L1 offset (2 fs + offset)/(fs + offset)
//
// for offsets finer than a double of the frequency can hold.
func (m Mode) ReactanceAtOffsetOhm(offsetHz float64) float64 {
	return m.reactance(m.ResonanceHz+offsetHz, offsetHz)
}

// reactance takes the frequency and its distance from fs apart: only the distance must be exact.
func (m Mode) reactance(frequencyHz, offsetHz float64) float64 {
	return 2 * math.Pi * m.InductanceHenry * offsetHz * ((frequencyHz + m.ResonanceHz) / frequencyHz)
}

// reactanceSlope returns dX/df = 2 pi L1 (1 + (fs/f)^2) in ohm per hertz.
func (m Mode) reactanceSlope(frequencyHz float64) float64 {
	ratio := m.ResonanceHz / frequencyHz
	return 2 * math.Pi * m.InductanceHenry * (1 + ratio*ratio)
}

// offsetForReactance is the inverse of ReactanceAtOffsetOhm: the offset at which the arm has the given reactance.
// With a = X/(2 pi L1) it is the root of offset^2 + (2 fs - a) offset - a fs = 0 that keeps the frequency positive,
// written without a difference that cancels at small offsets.
func (m Mode) offsetForReactance(reactanceOhm float64) float64 {
	a := reactanceOhm / (2 * math.Pi * m.InductanceHenry)
	twice := 2 * m.ResonanceHz
	return a * twice / (twice - a + math.Hypot(twice, a))
}

// Impedance returns Z(f) = R1 + j X(f) of the motional arm in ohm.
func (m Mode) Impedance(frequencyHz float64) complex128 {
	return complex(m.ResistanceOhm, m.ReactanceOhm(frequencyHz))
}

// Admittance returns 1/Z(f) of the motional arm in siemens; zero at f = 0.
func (m Mode) Admittance(frequencyHz float64) complex128 {
	return reciprocal(m.Impedance(frequencyHz))
}

// halfWidthHz is half the bandwidth: the offset at which |X| = R1.
func (m Mode) halfWidthHz() float64 {
	return m.BandwidthHz() / 2
}

// reciprocal returns 1/z, scaled by the larger part so that nothing overflows on the way and 1/(R + j inf) is 0.
func reciprocal(z complex128) complex128 {
	re, im := real(z), imag(z)
	if math.Abs(re) >= math.Abs(im) {
		ratio := im / re
		scale := re + im*ratio
		return complex(1/scale, -ratio/scale)
	}
	ratio := re / im
	scale := im + re*ratio
	return complex(ratio/scale, -1/scale)
}
