package resonance

import "math"

// UnknownNetworkInfluence is the name of what is not known of the fixture network, in a fit with ScaleUnknown.
const UnknownNetworkInfluence = "unknown_network"

// In a fixture network that is not known, fs and Q are those of the resonator as the network loads it. With Zp the impedance that the motional
// arm meets, the network's beside C0, the pole lies at
//
//	f = fs - X/(4 pi L1),   half = (R1 + R)/(4 pi L1),   Zp = R + jX
//
// so the resonance is pulled by X/(R1 + R) of half the loaded width, at most by X/R, the tangent of the phase of Zp. What that phase is
// the sweep does not tell. It is taken to be 0 with two standard uncertainties: the phase of the network itself, as its cables, pads and
// contacts leave it, and what C0 adds to it. Both are stated by convention, without a source: a network with a reactance of its own, a load capacitance
// above all, pulls further, and must be described to be known. The loaded Q has no such share: it is what it says, but of the loaded
// resonator, and R1/(R1 + R) of the unit's own.
const (
	unknownPhaseRad = 10 * math.Pi / 180

	// C0 where none is expected, and the resistance that it is seen beside: that of the instruments.
	unknownCapacitanceFarad = 3e-12
	unknownResistanceOhm    = 50.0
)

// loadedOnly is the remark on what is found in a network that is not known.
const loadedOnly = "The fixture network is not known: resonance frequency and Q are those of the unit as the network loads it, and its own Q is higher."

// unknownNetwork adds the influence of what is not known of the network: on fs, by half the loaded width times the tangent of the phase.
func (f *Fitter) unknownNetwork(est *Estimate) {
	c0 := f.request.Expected.ShuntCapacitanceFarad
	if c0 == 0 {
		c0 = unknownCapacitanceFarad
	}
	byShunt := 2 * math.Pi * est.Value[ResonanceHz] * c0 * unknownResistanceOhm
	pull := f.best.loaded.halfHz * math.Hypot(math.Tan(unknownPhaseRad), byShunt)
	est.Systematic = append(est.Systematic, contribution(UnknownNetworkInfluence, "", [Parameters]float64{ResonanceHz: pull}))
}
