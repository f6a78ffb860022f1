// Package verdict weighs every limit of a part type against what was measured of one unit, and says pass, fail or retest with the
// findings that led to it, in words that an operator can act on. A bad measurement is never called a bad part: a retest cause on a
// sweep suspends the limits that need that sweep and no others.
package verdict

import (
	"example.com/admit/service/parttype"
)

// Verdict is the one answer about an inspection.
type Verdict string

// The verdicts.
const (
	Pass   Verdict = "pass"
	Fail   Verdict = "fail"
	Retest Verdict = "retest"
)

// Verdicts lists the verdicts.
func Verdicts() []Verdict { return []Verdict{Pass, Fail, Retest} }

// Outcome is what one limit says of one value.
type Outcome string

// The outcomes. Suspended: the sweep that the limit needs cannot be trusted or is not there.
const (
	Conforms  Outcome = "conforms"
	Violates  Outcome = "violates"
	Undecided Outcome = "undecided"
	Suspended Outcome = "suspended"
)

// Outcomes lists the outcomes.
func Outcomes() []Outcome { return []Outcome{Conforms, Violates, Undecided, Suspended} }

// Value is a quantity with its standard uncertainty, both in SI units (or ppm, dB, as the name of the field says).
type Value struct{ Value, StandardUncertainty float64 }

// Where says which of several alike a finding is about; zero fields do not apply. DriveStep counts from 0 and is -1 when it does not apply.
type Where struct {
	DriveStep      int
	Order          int
	FrequencyRatio float64
	FromHz, ToHz   float64
}

// Nowhere is the Where of a limit that exists once.
var Nowhere = Where{DriveStep: -1}

// Finding is one limit held against one estimate: the mean of all valid readings of the unit so far.
type Finding struct {
	Quantity               parttype.Quantity
	Where                  Where
	Measured               Value // zero when there is no value
	HasValue               bool
	CommonUncertainty      float64 // the part of the standard uncertainty that a further reading would have in common with this one
	Readings               int     // attempts that Measured is the mean of; 0 without a value
	Unit                   string  // of Measured and Bounds: "ohm", "F", "ppm", "dB", "Hz", "1", "ppm/pF"
	Bounds                 parttype.Bounds
	ConformanceProbability float64
	Outcome                Outcome
	Text                   string
}

// RetestCause is a retest cause by its code, in words, with advice to the operator. Station: caused by the station, uses up no attempt.
type RetestCause struct {
	Cause   Cause
	Text    string
	Advice  string
	Station bool
}

// Main are the quantities of the main mode. Those that a unit may not have (without a zero-phase frequency) are pointers, nil where they do not
// exist.
type Main struct {
	MotionalResonanceHz, MotionalResistanceOhm, MotionalInductanceHenry Value
	MotionalCapacitanceFarad, ShuntCapacitanceFarad, QualityFactor      Value
	FigureOfMerit, ParallelResonanceHz                                  Value
	ResonanceHz, ResonanceResistanceOhm, AntiresonanceHz                *Value // nil: no zero-phase frequency
}

// Load are the quantities at the part type's load capacitance.
type Load struct {
	LoadCapacitanceFarad       float64
	Connection                 string
	LoadResonanceHz            Value
	LoadResonanceResistanceOhm Value
	PullingSensitivityPPMPerPF Value
}

// DriveReading is one level of the drive series.
type DriveReading struct {
	Step                                                  int
	PowerWatt, MotionalResistanceOhm, MotionalResonanceHz Value
}

// The kinds of mode beside the main one.
const (
	OvertoneMode = "overtone"
	UnwantedMode = "unwanted"
)

// ModeReading is one mode beside the main one. Kind: "overtone" or "unwanted".
type ModeReading struct {
	Kind                                      string
	Order                                     int // of an overtone that is near a whole multiple of the fundamental, else 0
	FrequencyHz, ResistanceOhm, SuppressionDB Value
	MultipleRatio                             *Value // fn/(n f1), nil without an order: 1.0028 is 0.28 % above n times the fundamental
}

// Order says on which overtone the main response lies.
type Order struct {
	Order       int     // the most probable one; 0: it cannot be told
	Probability float64 // of that order
	Candidates  []OrderCandidate
	Responses   []OrderedResponse
	Text        string // in words, with the reasons
}

// OrderCandidate is one overtone order with its probability.
type OrderCandidate struct {
	Order       int
	Probability float64
}

// OrderedResponse is one response of the unit, the main one first, with the order that goes with the most probable one of the main response.
type OrderedResponse struct {
	Order            int
	FrequencyHz      Value
	MultipleRatio    *Value // fn/(n f1), by the lowest order that was measured; nil for that one
	CapacitanceFarad *Value // Cn; nil where ohms are not known
	CapacitanceShare *Value // n^2 Cn/(m^2 Cm) of this response and the lowest order m that was measured; 1 for an ideal plate
}

// Observability says what could not have been seen between two frequencies.
type Observability struct {
	FromHz, ToHz, NarrowestWidthHz, SuppressionDB float64
}

// Quality is how good the main sweep was.
type Quality struct {
	SNRDecibel, ReducedChiSquare, ResidualCorrelation, SettlingTimeConstants float64
}

// BudgetLine is one named share of the standard uncertainty of the main quantities.
type BudgetLine struct {
	Source                                                                                     string
	MotionalResonanceHz, MotionalResistanceOhm, MotionalInductanceHenry, ShuntCapacitanceFarad float64
}

// Judgement is the whole answer about one inspection.
type Judgement struct {
	Verdict       Verdict
	Grade         string
	Findings      []Finding
	RetestCauses  []RetestCause
	Main          *Main // nil when no main sweep could be fitted; with an unknown scale only frequencies and Q are set
	ScaleUnknown  bool  // fixture network unknown: only frequencies and Q of Main carry meaning
	Load          *Load
	Drive         []DriveReading
	Modes         []ModeReading
	Observability []Observability
	Quality       *Quality
	Budget        []BudgetLine
	Remarks       []string // what a test engineer should know, one sentence each

	Disposition           Disposition // what happens to the unit; none of a retest before the last attempt
	ShuntCapacitanceFarad *Value      // C0 away from all modes; nil: not measured there. That of Main is the apparent one in its window
	Order                 *Order      // nil: nothing is known of it
}

// Disposition is what finally happens to a unit.
type Disposition string

// The dispositions. A retest has none until the last attempt.
const (
	NoDisposition Disposition = ""
	Passed        Disposition = "passed"
	Failed        Disposition = "failed"
	SetAside      Disposition = "set-aside"
)
