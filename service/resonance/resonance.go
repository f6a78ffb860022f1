// Package resonance turns one sweep of one window into the motional parameters of the mode in it: R1, L1, C1, C0, fs and Q with their
// covariance. It fits in the domain of the raw samples, where the noise is white, with the network's terms inside the model, so nothing
// is lost to de-embedding and the covariance is honest. It says when there is nothing to fit, and why; it judges no limits.
//
// The way of a sweep. points reduces each sample to a plane in which all networks look alike. plane finds a pole there by linear least squares,
// or, where that does not convince, by laying templates over the samples; either is a start. The models are forward (a unit in a known
// network, settled or, with memory.go, ringing), shape and power (a resonance in an unknown network, with and without phase) and magnitude (Rice distributed samples);
// leastsquares fits them, with Huber weights only where wild points stand alone. extend adds a shunt conductance, a free phase or a factor
// on the timing where the sweep asks for them. judge holds the outcome against what else the sweep could be, and covariance and systematic say
// how well it is known. Derive goes on from the parameters to everything that follows from the circuit.
//
// Accuracy. On white noise the estimates reach the Cramer-Rao bound within the scatter of some ten thousand trials, at any level from 5 dB a
// point up, settled or at a dwell of a fiftieth of the loaded time constant, and magnitudes reach that of their own distribution.
package resonance

import (
	"math"

	"example.com/admit/service/crystal"
	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
)

// State says what the sweep was found to show.
type State string

// The states. Found is the only one with a trustworthy estimate; the others become retest causes of the same name (verdict).
const (
	Found               State = "found"
	NoUnit              State = "no_unit"                 // the whole sweep near an open
	Shorted             State = "shorted"                 // the whole sweep near a short
	NoResonance         State = "no_resonance"            // a capacitance and nothing else
	OutsideSweep        State = "resonance_outside_sweep" // only the tail of a resonance: about where is in Quality, and in Value if the circuit can be told
	TooNoisy            State = "too_noisy"               // something is there, but its parameters cannot be told
	SweptTooFast        State = "swept_too_fast"          // the resonator still rang from earlier points
	Misfit              State = "model_misfit"            // the samples are not those of a crystal unit in this network
	CalibrationMismatch State = "calibration_mismatch"    // samples that no passive unit could give
)

// Parameter indexes the fitted quantities in Estimate.Value and the covariances.
type Parameter int

// The parameters, in the order of every vector and matrix. ShuntConductance, PhaseRad are 0 with zero variance when they were not fitted.
const (
	ResonanceHz             Parameter = iota // fs, motional resonance
	LogResistance                            // ln(R1/ohm)
	LogInductance                            // ln(L1/henry)
	ShuntCapacitanceFarad                    // C0
	ShuntConductanceSiemens                  // G0
	PhaseRad                                 // free phase of the samples
	Parameters                               // how many there are
)

// Matrix is a covariance over the parameters, row by row.
type Matrix [Parameters][Parameters]float64

// Expected is what the part type and station lead one to expect: start values, never priors. Zero values are unknown.
type Expected struct {
	ResonanceHz, ResistanceOhm, InductanceHenry, ShuntCapacitanceFarad float64
}

// Request is one sweep to fit, with everything that is known about how it was taken.
type Request struct {
	Sweep         *sweep.Sweep
	Terms         *network.Terms         // at the sweep's frequencies
	Contributions []network.Contribution // systematic influences on the terms
	NoiseRMS      float64                // complex rms noise of one raw sample from the instrument; 0: unknown
	Expected      Expected
	ScaleUnknown  bool // fixture network unknown: a free complex gain stands in for the terms; only fs, Q and shape count, as it loads them

	ClockOffset      float64 // true frequency = stated frequency x (1 + ClockOffset)
	ClockUncertainty float64 // its standard uncertainty; becomes the influence "reference_clock"
}

// Contribution is the share of one systematic influence in the covariance of the parameters: by how much they would move if that influence
// were off by one standard uncertainty, and the covariance of rank one that follows. An influence of the same Name and Group moves every
// sweep of an inspection together: differences between sweeps take the difference of the shifts, not the sum of the variances.
type Contribution struct {
	Name, Group string
	Shift       [Parameters]float64
	Covariance  Matrix
}

// Quality is how well the model describes the samples.
type Quality struct {
	SNRDecibel            float64 // peak of the main response over the noise of one reading, the larger of stated and seen; 160 at most
	NoiseRMS              float64 // of one raw sample, as the residual says
	ReducedChiSquare      float64 // against the instrument's noise; NaN-free: 0 when that is unknown
	ResidualCorrelation   float64 // lag-1 correlation of the complex residual
	ResidualOverPeak      float64 // rms residual over the main response
	SettlingTimeConstants float64 // dwell over the loaded time constant; 0 when the dwell is unknown
	FreePhaseRad          float64 // what a free phase would be, and
	FreePhaseSigma        float64 // its standard deviation; 0 when not identifiable
	Gain                  float64 // log-likelihood gain over a unit without resonance
	Points, WildPoints    int
	Iterations            int
	LoadedResonanceHz     float64 // where the fixture shows the resonance (0: not known), and
	LoadedBandwidthHz     float64 // how wide between its half-power points
	Memory                bool    // the resonator still rang from earlier points, and the model says so
	DwellSeconds          float64 // as stated, or as the samples have it where they show another; 0: unknown
}

// Estimate is the outcome of one fit.
type Estimate struct {
	State  State
	Detail string // in words with numbers, for a person: why it is not Found, or, in whole sentences, what is remarkable

	Value       [Parameters]float64
	Statistical Matrix         // from the noise of this sweep
	Systematic  []Contribution // by influence
	Fitted      [Parameters]bool

	// ScaleUnknown: R1, L1, C0 carry no meaning. fs and Q do, those of the resonator as the network loads it: the unit's own Q is higher by
	// a factor that the sweep does not tell, and fs carries the influence UnknownNetworkInfluence.
	ScaleUnknown bool
	Quality      Quality
}

// Unit returns the equivalent circuit of the estimate.
func (e *Estimate) Unit() crystal.Unit { return UnitOf(e.Value) }

// Covariance returns the whole covariance, statistical and systematic together.
func (e *Estimate) Covariance() Matrix {
	m := e.Statistical
	for _, c := range e.Systematic {
		for i := range m {
			for k := range m[i] {
				m[i][k] += c.Covariance[i][k]
			}
		}
	}
	return m
}

// UnitOf returns the equivalent circuit of a set of parameters.
func UnitOf(values [Parameters]float64) crystal.Unit {
	return crystal.Unit{
		Modes: []crystal.Mode{{
			ResonanceHz:     values[ResonanceHz],
			ResistanceOhm:   math.Exp(values[LogResistance]),
			InductanceHenry: math.Exp(values[LogInductance]),
		}},
		ShuntCapacitanceFarad:   values[ShuntCapacitanceFarad],
		ShuntConductanceSiemens: values[ShuntConductanceSiemens],
	}
}
