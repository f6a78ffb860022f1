package survey

import (
	"math"

	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// Request is one sweep to search, with everything that is known about how it was taken.
type Request struct {
	Sweep         *sweep.Sweep
	Terms         *network.Terms         // at the sweep's frequencies
	Contributions []network.Contribution // systematic influences on the terms
	NoiseRMS      float64                // complex rms noise of one raw sample from the instrument; 0: unknown

	// ScaleUnknown: the fixture network is not known. Terms are not looked at.
	ScaleUnknown bool

	// Main is the main mode as a main sweep gave it, nil where there is none: a start where this sweep holds it, a known neighbour where it
	// does not, and what suppressions are told against where this sweep tells R1 less well. With an unknown network it is a start.
	Main *resonance.Estimate

	ClockOffset      float64 // true frequency = stated frequency x (1 + ClockOffset)
	ClockUncertainty float64 // its standard uncertainty; becomes the influence "reference_clock"

	NarrowestHz, WidestHz float64 // loaded widths of the modes to look for; 0: what grid and main mode suggest

	FalseAlarmRate       float64 // of modes that are none, a survey; 0: DefaultFalseAlarmRate
	DetectionProbability float64 // that observability promises; 0: DefaultDetectionProbability
	MostModes            int     // at which the search ends, main mode included; 0: DefaultMostModes; at most MostModes

	Spans []Span // for which observability is stated; none: the whole sweep at 20 and 40 dB in the nominal pi-network
}

// Defaults of a Request.
const (
	DefaultFalseAlarmRate       = 0.01
	DefaultDetectionProbability = 0.95
	DefaultMostModes            = 16

	// MostModes is the largest number of modes that a survey can hold.
	MostModes = 24
)

// Span asks between which frequencies a mode of which suppression would have been seen.
type Span struct {
	FromHz, ToHz  float64
	SuppressionDB float64
	Definition    Definition // with an unknown network of no account: relative strength is meant
}

// Definition says which of its meanings a suppression in decibels has.
type Definition int

// The definitions of suppression (package network): 20 log10 (Rn + Zt)/(R1 + Zt) with a termination Zt of 0, 25 and 100 ohm.
const (
	ResistanceRatio Definition = iota
	PiNetworkTransmission
	SeriesThroughTransmission
	Definitions // how many there are
)

// String returns the name that limits files use.
func (d Definition) String() string {
	switch d {
	case ResistanceRatio:
		return "resistance-ratio"
	case PiNetworkTransmission:
		return "pi-network-transmission"
	case SeriesThroughTransmission:
		return "series-through-transmission"
	}
	return "unknown definition"
}

// terminationOhm returns what the definition adds to both resistances.
func (d Definition) terminationOhm() float64 {
	switch d {
	case PiNetworkTransmission:
		return network.PiNetwork.NominalTerminationOhm()
	case SeriesThroughTransmission:
		return network.SeriesThrough.NominalTerminationOhm()
	}
	return 0
}

// Kind says what a mode is to the unit.
type Kind string

// The kinds of mode. In an overtone window the strongest mode is the overtone; in any other sweep that shows it, main is the mode nearest to the
// known main mode, or the strongest where none is known.
const (
	MainMode     Kind = "main"
	OvertoneMode Kind = "overtone"
	UnwantedMode Kind = "unwanted"
)

// Quantity is a value with its standard uncertainty, from the noise of the sweep and from all systematic influences together.
type Quantity struct{ Value, Statistical, Systematic float64 }

// StandardUncertainty returns the standard uncertainty of everything together.
func (q Quantity) StandardUncertainty() float64 { return math.Hypot(q.Statistical, q.Systematic) }

// Mode is one mode that was found. With an unknown network ResistanceOhm is the inverse of its height in the raw sample and InductanceHenry the
// inductance that goes with it and the loaded width: ratios of resistances are then ratios of heights, and nothing is in ohms.
type Mode struct {
	Kind           Kind
	Order          int     // of an overtone window, else 0
	FrequencyRatio float64 // of an overtone window given as a ratio, else 0

	FrequencyHz     Quantity // motional resonance; with an unknown network the loaded one
	ResistanceOhm   Quantity
	InductanceHenry Quantity
	LoadedWidthHz   Quantity // half-power width in this network, R + Re Zt over 2 pi L

	Suppression [Definitions]Quantity // against the main mode, dB; of ResistanceRatio only with an unknown network; 0 for the main mode itself
	Suppressed  bool                  // there was a main mode to compare with

	LoadedFrequencyHz   float64 // where the fixture shows it
	TimeConstantSeconds float64 // loaded, of the amplitude
	Gain                float64 // of twice the log-likelihood over a fit without it; of strong modes the part that its own response explains
	SupportPoints       float64 // points that carry its response; about 1: nothing tells it from a wild point, look again with a finer grid
	Outside             bool    // beyond the edge of the sweep: only its tail is seen
}

// Parameter is the place of a quantity among the three of a mode.
type Parameter int

// The parameters of a mode, in the order of Result.Value.
const (
	ResonanceHz   Parameter = iota
	LogResistance           // ln(R/ohm)
	LogInductance           // ln(L/henry)
	perMode                 // how many there are
)

// Contribution is the share of one systematic influence: by how much each of Result.Value would move if that influence were off by one
// standard uncertainty. An influence of the same Name and Group moves every sweep of an inspection together.
type Contribution struct {
	Name, Group string
	Shift       []float64
}

// Observability says what could not have been seen: modes narrower than NarrowestWidthHz (loaded) between two frequencies, suppressed by
// SuppressionDB; wider ones would have been with the detection probability of the request.
type Observability struct {
	FromHz, ToHz     float64
	SuppressionDB    float64
	Definition       Definition
	NarrowestWidthHz float64 // +Inf: no mode at all would have been seen, because the sweep does not reach there or its noise is too high
	Settled          bool    // false: the width is that of a mode that settles in a dwell, not that of the noise
	Behind           int     // index of the mode that stands there and hides others about its own width, or -1
}

// Quality is how well the model describes the samples.
type Quality struct {
	SNRDecibel            float64 // height of the strongest mode over the noise of one reading
	NoiseRMS              float64 // of one raw sample, as the residual says
	ReducedChiSquare      float64 // against the instrument's noise; 0 when that is unknown
	ResidualCorrelation   float64 // lag-1 correlation of the complex residual
	ResidualOverPeak      float64 // rms residual over the height of the strongest mode
	SettlingTimeConstants float64 // dwell over the loaded time constant of the narrowest mode; 0 when the dwell is unknown
	SettledWidthHz        float64 // modes from this loaded width up settle in the dwell; 0 when the dwell is unknown
	Memory                bool    // the resonator still rang from earlier points, and the model says so
	DwellSeconds          float64 // as stated, or as the samples have it where they show another; 0: unknown
	Points, WildPoints    int
	Tests                 int     // templates laid over the sweep
	Threshold             float64 // what the likelihood had to gain for a mode
	Rounds, Iterations    int
	Converged             bool // the last joint fit met its stopping test
}

// Result is the outcome of one survey. Its slices are reused by the next one into the same Result.
type Result struct {
	State  resonance.State // Found: the list of modes can be trusted, an empty one too
	Detail string          // in words with numbers, for a person: why it is not Found, or what is remarkable

	Modes []Mode // the main mode or overtone first, then by frequency
	More  bool   // the search ended at the largest number of modes, or of steps: there may be more

	ShuntCapacitanceFarad   Quantity // C0 away from all modes
	ShuntConductanceSiemens Quantity // 0 where it was not fitted
	PhaseRad                Quantity // free phase of the samples; 0 where it was not fitted
	ScaleUnknown            bool

	// Value holds three parameters for each of Modes, then C0, G0 and the free phase, Statistical their covariance, row by row, from the noise of
	// this sweep. What was not fitted has zero variance.
	Value       []float64
	Statistical []float64
	Systematic  []Contribution

	Observability []Observability
	Quality       Quality
}

// Parameters returns the length of Value.
func (r *Result) Parameters() int { return len(r.Value) }

// Index returns the place of a mode's parameter in Value.
func (r *Result) Index(mode int, p Parameter) int { return int(perMode)*mode + int(p) }

// MainIndex returns which of Modes is the main mode, or -1.
func (r *Result) MainIndex() int {
	for i := range r.Modes {
		if r.Modes[i].Kind == MainMode {
			return i
		}
	}
	return -1
}
