// Package sweep holds what a fixture measured: the frequencies in measuring order, one complex (or magnitude-only) sample at each, the
// level of the source and the timing. It says which sweeps are admissible; it fits nothing and corrects nothing.
package sweep

import (
	"fmt"
	"math"
	"time"
)

// MaxPoints is the largest number of points of one sweep.
const MaxPoints = 200001

// Role says why a sweep was taken.
type Role string

// The roles.
const (
	Main             Role = "main"
	Drive            Role = "drive"
	Overtone         Role = "overtone"
	Unwanted         Role = "unwanted"
	ShuntCapacitance Role = "shunt-capacitance"
)

// Roles lists every role.
func Roles() []Role { return []Role{Main, Drive, Overtone, Unwanted, ShuntCapacitance} }

// Quantity says what a sample is.
type Quantity string

// The quantities. Transmission and reflection are ratios without unit, admittance is in siemens, impedance in ohm.
const (
	S21          Quantity = "s21"
	S11          Quantity = "s11"
	S21Magnitude Quantity = "s21-magnitude"
	Admittance   Quantity = "admittance"
	Impedance    Quantity = "impedance"
)

// Quantities lists every quantity.
func Quantities() []Quantity { return []Quantity{S21, S11, S21Magnitude, Admittance, Impedance} }

// Complex reports whether samples of this quantity carry a phase.
func (q Quantity) Complex() bool { return q != S21Magnitude }

// SourcePhase says what the source does with its phase at a change of frequency.
type SourcePhase string

// The source phases. Unstated means that the station did not say.
const (
	PhaseUnstated   SourcePhase = ""
	PhaseContinuous SourcePhase = "continuous"
	PhaseRestarted  SourcePhase = "restarted"
)

// SourcePhases lists the source phases that can be stated.
func SourcePhases() []SourcePhase { return []SourcePhase{PhaseContinuous, PhaseRestarted} }

// Timing is how long the source stayed at each frequency. A zero dwell means that the station did not say.
type Timing struct {
	Dwell     time.Duration // time spent at each frequency
	Averaging time.Duration // the tail of the dwell over which a sample averages; 0 with a dwell: the whole dwell
	LeadIn    time.Duration // time at the first frequency before the first dwell begins
	Phase     SourcePhase
}

// Grid is a uniform linear grid of frequencies; StopHz may be below StartHz.
type Grid struct {
	StartHz, StopHz float64
	Points          int
}

// At returns the frequency of point i in hertz; both ends are exact.
func (g Grid) At(i int) float64 {
	if i == g.Points-1 {
		return g.StopHz
	}
	return g.StartHz + (g.StopHz-g.StartHz)*float64(i)/float64(g.Points-1)
}

// Sweep is one sweep. Re, Im and FrequencyHz have one length and stand in measuring order; Im is nil for magnitude-only samples.
type Sweep struct {
	Role           Role
	Order          int     // of an overtone window, else 0
	FrequencyRatio float64 // of an overtone window given as a ratio, else 0
	DriveStep      int     // of a drive sweep: index into the part type's levels

	Quantity       Quantity
	SourcePowerDBm *float64 // available power at the fixture's input port; nil: not stated
	Timing         Timing
	Grid           *Grid // non-nil when the frequencies are the points of this grid

	FrequencyHz []float64
	Re, Im      []float64
}

// Points returns the number of points.
func (s *Sweep) Points() int { return len(s.FrequencyHz) }

// SpanHz returns the lowest and the highest frequency.
func (s *Sweep) SpanHz() (low, high float64) {
	low, high = math.Inf(1), math.Inf(-1)
	for _, f := range s.FrequencyHz {
		low, high = math.Min(low, f), math.Max(high, f)
	}
	return low, high
}

// Fault is one reason why a sweep is not admissible: the field, what it may be, and what was given.
type Fault struct{ Field, Want, Got string }

func (f Fault) Error() string { return fmt.Sprintf("%s: want %s, got %s", f.Field, f.Want, f.Got) }

// Check returns every reason why the sweep is not admissible. Any direction is admissible, and so are repeated frequencies
// where a grid says so; a resonance needs at least MinPoints points.
func (s *Sweep) Check() []Fault {
	var faults []Fault
	add := func(field, want, format string, got ...any) {
		faults = append(faults, Fault{field, want, fmt.Sprintf(format, got...)})
	}
	if !known(s.Role, Roles()) {
		add("role", fmt.Sprintf("one of %v", Roles()), "%q", s.Role)
	}
	if !known(s.Quantity, Quantities()) {
		add("quantity", fmt.Sprintf("one of %v", Quantities()), "%q", s.Quantity)
	}
	if s.Timing.Phase != PhaseUnstated && !known(s.Timing.Phase, SourcePhases()) {
		add("source_phase", fmt.Sprintf("one of %v", SourcePhases()), "%q", s.Timing.Phase)
	}
	if s.Role == Overtone && (s.Order > 0) == (s.FrequencyRatio > 0) {
		add("order", "an order above 0 or a frequency_ratio above 0, and only one of them", "order %d, frequency_ratio %g", s.Order, s.FrequencyRatio)
	}
	if s.Role != Overtone && (s.Order != 0 || s.FrequencyRatio != 0) {
		add("order", "none, the sweep is no overtone window", "order %d, frequency_ratio %g", s.Order, s.FrequencyRatio)
	}
	if s.DriveStep < 0 || (s.Role != Drive && s.DriveStep != 0) {
		add("drive_step", "an index from 0, for a drive sweep only", "%d", s.DriveStep)
	}
	if p := s.SourcePowerDBm; p != nil && !(*p >= -200 && *p <= 60) {
		add("source_power_dbm", "-200 to 60", "%g", *p)
	}
	if t := s.Timing; t.Dwell < 0 || t.Averaging < 0 || t.LeadIn < 0 || (t.Averaging > 0 && t.Averaging > t.Dwell) {
		add("dwell", "times of at least 0, averaging no longer than the dwell", "dwell %v, averaging %v, lead-in %v", t.Dwell, t.Averaging, t.LeadIn)
	}
	n := len(s.FrequencyHz)
	if n < MinPoints || n > MaxPoints {
		add("points", fmt.Sprintf("%d to %d", MinPoints, MaxPoints), "%d", n)
	}
	if len(s.Re) != n || (s.Quantity.Complex() && len(s.Im) != n) || (!s.Quantity.Complex() && len(s.Im) != 0) {
		add("samples", fmt.Sprintf("one sample for each of %d frequencies", n), "%d real and %d imaginary parts", len(s.Re), len(s.Im))
		return faults
	}
	if g := s.Grid; g != nil && (g.Points != n || !finite(g.StartHz) || !finite(g.StopHz)) {
		add("grid", fmt.Sprintf("finite ends and %d points", n), "%g to %g Hz, %d points", g.StartHz, g.StopHz, g.Points)
	}
	return append(faults, s.checkValues()...)
}

// MinPoints is the smallest number of points of a sweep.
const MinPoints = 9

// maxSample bounds the modulus of a sample: far above any ratio, siemens or ohm of this trade, far below overflow when squared.
const maxSample = 1e12

// checkValues looks at every frequency and sample and reports the first bad one of each kind.
func (s *Sweep) checkValues() []Fault {
	var faults []Fault
	badFrequency, badSample := -1, -1
	for i, f := range s.FrequencyHz {
		if badFrequency < 0 && !(f >= 1 && f <= 1e12) {
			badFrequency = i
		}
		im := 0.0
		if s.Im != nil {
			im = s.Im[i]
		}
		if badSample < 0 && !(math.Abs(s.Re[i]) <= maxSample && math.Abs(im) <= maxSample) {
			badSample = i
		}
	}
	if badFrequency >= 0 {
		faults = append(faults, Fault{"frequency_hz", "finite values from 1 to 1e12", fmt.Sprintf("%g at point %d", s.FrequencyHz[badFrequency], badFrequency)})
	}
	if badSample >= 0 {
		got := fmt.Sprintf("%g at point %d", s.Re[badSample], badSample)
		if s.Im != nil {
			got = fmt.Sprintf("(%g, %g) at point %d", s.Re[badSample], s.Im[badSample], badSample)
		}
		faults = append(faults, Fault{"samples", fmt.Sprintf("finite values of modulus up to %g", maxSample), got})
	}
	if s.Quantity == S21Magnitude {
		for i, v := range s.Re {
			if v < 0 {
				faults = append(faults, Fault{"samples", "magnitudes of at least 0", fmt.Sprintf("%g at point %d", v, i)})
				break
			}
		}
	}
	if low, high := s.SpanHz(); badFrequency < 0 && len(s.FrequencyHz) > 0 && !(high > low) {
		faults = append(faults, Fault{"frequency_hz", "a span above 0", fmt.Sprintf("every point at %g Hz", low)})
	}
	if i := s.repeated(); i >= 0 && s.Grid == nil {
		faults = append(faults, Fault{"frequency_hz", "no frequency twice in a row, unless a grid is given", fmt.Sprintf("%g at points %d and %d", s.FrequencyHz[i], i, i+1)})
	}
	return faults
}

// repeated returns the first index whose successor has the same frequency, or -1.
func (s *Sweep) repeated() int {
	for i := 1; i < len(s.FrequencyHz); i++ {
		if s.FrequencyHz[i] == s.FrequencyHz[i-1] {
			return i - 1
		}
	}
	return -1
}

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }

func known[T comparable](v T, all []T) bool {
	for _, a := range all {
		if v == a {
			return true
		}
	}
	return false
}
