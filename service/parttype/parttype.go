// Package parttype is a part type: the named, versioned, immutable set of nominal values and limits that a crystal unit is held against.
// It parses the limits file a person writes, checks it whole (every fault is listed at once), and knows its canonical hash. It judges
// nothing.
package parttype

import (
	"crypto/sha256"

	"example.com/admit/service/crystal"
)

// Quantity is what a limit is about: a key of the limits file. Limits of the drive section are prefixed "drive.".
type Quantity string

// The quantities of the limits file.
const (
	FrequencyDeviation      Quantity = "frequency_deviation_ppm"
	MotionalResistance      Quantity = "motional_resistance"
	ResonanceResistance     Quantity = "resonance_resistance"
	LoadResonanceResistance Quantity = "load_resonance_resistance"
	MotionalCapacitance     Quantity = "motional_capacitance"
	ShuntCapacitance        Quantity = "shunt_capacitance"
	QualityFactor           Quantity = "quality_factor"
	PullingSensitivity      Quantity = "pulling_sensitivity_ppm_per_pf"
	PullingRange            Quantity = "pulling_range_ppm"
	StartMargin             Quantity = "start_margin"
	DriveResistanceRatio    Quantity = "drive.resistance_ratio"
	DriveMotionalResistance Quantity = "drive.motional_resistance"
	DriveFrequencyShift     Quantity = "drive.frequency_shift_ppm"
	DriveReturnShift        Quantity = "drive.return_shift_ppm"
	OvertoneSuppression     Quantity = "overtone_suppression"
	UnwantedModeSuppression Quantity = "unwanted_mode_suppression"
)

// FrequencyOf says which of a unit's frequencies a frequency limit is about.
type FrequencyOf string

// The frequencies a limit can be about: at the load capacitance, at zero phase, and of the motional arm.
const (
	LoadResonance     FrequencyOf = "load_resonance"
	Resonance         FrequencyOf = "resonance"
	MotionalResonance FrequencyOf = "motional_resonance"
)

// Rule says how a limit is held against an uncertain value (JCGM 106).
type Rule string

// The decision rules.
const (
	Simple            Rule = "simple"
	GuardedAcceptance Rule = "guarded-acceptance"
	GuardedRejection  Rule = "guarded-rejection"
	GuardedBoth       Rule = "guarded-both"
)

// Rules lists the decision rules.
func Rules() []Rule { return []Rule{Simple, GuardedAcceptance, GuardedRejection, GuardedBoth} }

// Definition says which of the three meanings a suppression in decibels has.
type Definition string

// The definitions of suppression: 20 log10(Rn/R1), and the same with the network's termination added to both.
const (
	ResistanceRatio           Definition = "resistance-ratio"
	PiNetworkTransmission     Definition = "pi-network-transmission"
	SeriesThroughTransmission Definition = "series-through-transmission"
)

// Definitions lists the definitions of suppression.
func Definitions() []Definition {
	return []Definition{ResistanceRatio, PiNetworkTransmission, SeriesThroughTransmission}
}

// The modes of vibration that a unit may have (IEC 60122-1). Overtones of thickness shear are odd; those of the others need not be near
// whole multiples of the fundamental.
const (
	ThicknessShear = "thickness-shear"
	FaceShear      = "face-shear"
	Extension      = "extension"
	Flexure        = "flexure"
	Torsion        = "torsion"
)

// VibrationModes lists the modes of vibration.
func VibrationModes() []string {
	return []string{ThicknessShear, FaceShear, Extension, Flexure, Torsion}
}

// Bounds is an interval with one or both ends, in SI units (ppm, dB and ratios as their key says). A nil end is open.
type Bounds struct{ Min, Max *float64 }

// Decide overrides the part type's decision for one limit; zero values mean the part type's own.
type Decide struct {
	Rule       Rule
	Confidence float64
}

// Limit is one limit of the limits section.
type Limit struct {
	Quantity Quantity
	Bounds   Bounds
	Decide   Decide

	Of                    FrequencyOf // frequency_deviation_ppm only
	FromFarad, ToFarad    float64     // pulling_range_ppm only: the two load capacitances
	NegativeResistanceOhm float64     // start_margin only, below 0
}

// CircuitCondition is how the unit's frequency is specified: at series resonance, or with a load capacitance.
type CircuitCondition struct {
	SeriesResonance      bool
	LoadCapacitanceFarad float64
	Connection           crystal.LoadConnection
}

// Temperature is where the limits hold and how readings elsewhere are referred to it. Curve: ppm/K, ppm/K^2, ppm/K^3 about ReferenceC.
type Temperature struct {
	ReferenceC              float64
	AllowedC                Bounds
	Curve                   [3]float64
	CurveUncertaintyPercent float64 // standard uncertainty of what the curve says, relative: units of one type differ
}

// Shift returns what the curve says of a unit at a temperature, in ppm of its frequency at the reference, and the slope there in ppm/K.
func (t *Temperature) Shift(celsius float64) (ppm, slope float64) {
	d := celsius - t.ReferenceC
	ppm = d * (t.Curve[0] + d*(t.Curve[1]+d*t.Curve[2]))
	slope = t.Curve[0] + d*(2*t.Curve[1]+d*3*t.Curve[2])
	return ppm, slope
}

// RatioLimit is a largest resistance ratio, which may depend on R1 at the nominal level: the first row whose UpToOhm is not below R1;
// a row with UpToOhm 0 holds for every R1.
type RatioLimit struct{ UpToOhm, Max float64 }

// Drive is the drive-level section.
type Drive struct {
	LevelsWatt       []float64
	TolerancePercent float64
	WaitSeconds      float64

	ResistanceRatio    []RatioLimit // nil: no limit
	MotionalResistance Bounds
	FrequencyShiftPPM  Bounds // of the magnitude of each level's shift against drive_level
	ReturnSteps        []int  // the two steps of return_shift_ppm, an earlier and a later one at one level
	ReturnShiftPPM     Bounds // of the magnitude of the shift between them

	ResistanceRatioDecide, MotionalResistanceDecide, FrequencyShiftDecide, ReturnShiftDecide Decide
}

// OvertoneLimit is one overtone window and its suppression.
type OvertoneLimit struct {
	Order          int     // 0 when FrequencyRatio is given
	FrequencyRatio float64 // 0 when Order is given
	SuppressionDB  Bounds
	Decide         Decide
	Definition     Definition
}

// UnwantedLimit is one span about the main mode in which other modes must be suppressed.
type UnwantedLimit struct {
	FromHz, ToHz   float64 // relative to the measured main mode
	MinimumWidthHz float64
	SuppressionDB  Bounds
	Decide         Decide
	Definition     Definition
}

// Decision is how undecided readings are treated.
type Decision struct {
	Rule             Rule
	Confidence       float64
	Attempts         int
	AfterLastAttempt string // SetAside or Fail
}

// What happens to a unit that is still undecided after its last attempt.
const (
	SetAside = "set-aside"
	Fail     = "fail"
)

// Grade is one bin of accepted units; the first that fits is taken.
type Grade struct {
	Name   string
	Limits []Limit
}

// Grades are the bins; Adjacent bins share borders and carry no guard band there.
type Grades struct {
	Adjacent bool
	Of       []Grade
}

// PartType is a parsed and checked limits file. It is immutable once published.
type PartType struct {
	Name                string
	Version             int
	VibrationMode       string
	Overtone            int
	NominalFrequencyHz  float64
	CalibrationRequired bool
	Condition           CircuitCondition
	DriveLevelWatt      float64 // rms power in R1
	MaximumDriveWatt    float64
	Temperature         *Temperature
	Limits              []Limit // in the order of the file
	Drive               *Drive
	Overtones           []OvertoneLimit
	UnwantedModes       []UnwantedLimit
	Decision            Decision
	Grades              *Grades

	Source []byte // the limits file as it was given
}

// Hash returns the SHA-256 of the limits file as it was given: what a record refers to.
func (p *PartType) Hash() [sha256.Size]byte { return sha256.Sum256(p.Source) }
