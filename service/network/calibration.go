package network

import (
	"time"
)

// Kind names the circuit between receiver and unit.
type Kind string

// The fixture networks. Unknown: only frequencies, Q and relative strengths can be taken from a sweep.
const (
	PiNetwork     Kind = "pi-network"
	SeriesThrough Kind = "series-through"
	Reflection    Kind = "reflection"
	HighImpedance Kind = "high-impedance"
	Unknown       Kind = "unknown"
)

// Kinds lists every fixture network.
func Kinds() []Kind { return []Kind{PiNetwork, SeriesThrough, Reflection, HighImpedance, Unknown} }

// NominalTerminationOhm returns the resistance that the network shows the unit when nothing else is stated: 2 RT of the pi-network
// (IEC 60444-1, nominal 25 ohm), 100 ohm of a series-through fixture between 50 ohm ports, 50 ohm of a reflection port, and 20 kohm of
// the high-impedance network (ours, for tuning forks). Unknown has none: 0.
func (k Kind) NominalTerminationOhm() float64 {
	switch k {
	case PiNetwork:
		return 25
	case SeriesThrough:
		return 100
	case Reflection:
		return 50
	case HighImpedance:
		return 20000
	}
	return 0
}

// StandardKind names what was put in the place of the unit. Check is a known resistance that is not used in the solution and proves it.
type StandardKind string

// The kinds of standard.
const (
	Open  StandardKind = "open"
	Short StandardKind = "short"
	Load  StandardKind = "load"
	Check StandardKind = "check"
)

// StandardKinds lists every kind of standard.
func StandardKinds() []StandardKind { return []StandardKind{Open, Short, Load, Check} }

// Standard is one known impedance and the sweep that was taken of it. A kind may appear several times, one sweep for each band.
// Open: CapacitanceFarad. Short: ResistanceOhm and InductanceHenry in series. Load and check: ResistanceOhm with InductanceHenry in series
// and CapacitanceFarad across it. Re and Im are raw samples at FrequencyHz (ascending), all of one length; Im nil means that the standards
// were read as magnitudes, and then all of them were. Sweeps of one kind with equal values are one standard in several bands.
type Standard struct {
	Kind StandardKind
	File string // where the sweep came from, for messages

	ResistanceOhm, ResistanceUncertaintyOhm       float64
	InductanceHenry, InductanceUncertaintyHenry   float64
	CapacitanceFarad, CapacitanceUncertaintyFarad float64

	FrequencyHz, Re, Im []float64
}

// ReceiverNoise is the complex noise of one sample: E|n|^2 = RMS^2, in the units of the raw sample, at the stated source power and
// averaging time. It scales with 10^(-(P - P0)/20) for a ratio to the source, and with 1/sqrt(averaging); see SampleNoise.
type ReceiverNoise struct {
	RMS            float64
	SourcePowerDBm *float64
	Averaging      time.Duration
}

// Calibration is what is known of one contact head at one time. Times are absolute; Standards may be empty, and then the nominal network
// stands where the part type allows it.
type Calibration struct {
	ID                    string
	ContactHead           string
	Network               Kind
	ReferenceImpedanceOhm float64
	NominalTerminationOhm float64
	TakenAt               time.Time
	ValidFor              time.Duration
	TemperatureC          *float64

	ReceiverNoise *ReceiverNoise

	SourceLevelOffsetDB, SourceLevelUncertaintyDB         float64 // true source level = stated + offset
	DriftGainDB, DriftPhaseDeg                            float64 // standard uncertainties since calibration
	ContactUncertaintyOhm                                 float64 // repeat contact, in series with the unit
	ReferenceClockOffsetPPM, ReferenceClockUncertaintyPPM float64 // true = indicated x (1 + offset 1e-6)

	Standards []Standard
}

// Default standard uncertainties of a calibration that states none: common practice, no source.
const (
	DefaultDriftGainDB              = 0.02
	DefaultDriftPhaseDeg            = 0.1
	DefaultContactUncertaintyOhm    = 0.05
	DefaultSourceLevelUncertaintyDB = 0.1
)

// ExpiresAt returns the end of the calibration's validity.
func (c *Calibration) ExpiresAt() time.Time { return c.TakenAt.Add(c.ValidFor) }

// TrueFrequencyHz returns the frequency that the source really had, f (1 + offset 1e-6), from the one that it indicated.
func (c *Calibration) TrueFrequencyHz(indicatedHz float64) float64 {
	return indicatedHz + indicatedHz*c.ReferenceClockOffsetPPM*1e-6
}

// referenceImpedanceOhm returns Z0 of the ports, 50 ohm where nothing is stated.
func (c *Calibration) referenceImpedanceOhm() float64 {
	if c.ReferenceImpedanceOhm > 0 {
		return c.ReferenceImpedanceOhm
	}
	return 50
}

// terminationOhm returns the nominal resistance that the unit sees: as stated, else that of the network's kind.
func (c *Calibration) terminationOhm() float64 {
	if c.NominalTerminationOhm > 0 {
		return c.NominalTerminationOhm
	}
	return c.Network.NominalTerminationOhm()
}
