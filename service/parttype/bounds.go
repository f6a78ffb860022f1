package parttype

import (
	"fmt"
	"math"

	"example.com/admit/service/parttype/document"
)

// measure is what the bounds of one kind of limit are: dimensional where unit is set, bare numbers otherwise, and never beyond lowest and
// highest, which no unit can be.
type measure struct {
	unit            unit
	lowest, highest float64
}

// The measures: anything, what cannot be negative, what cannot be positive.
var (
	anyNumber   = measure{lowest: math.Inf(-1), highest: math.Inf(1)}
	notNegative = measure{lowest: 0, highest: math.Inf(1)}
	notPositive = measure{lowest: math.Inf(-1), highest: 0}
	resistance  = measure{unit: ohm, lowest: 0, highest: math.Inf(1)}
	capacitance = measure{unit: farad, lowest: 0, highest: math.Inf(1)}

	// From absolute zero to the point where quartz ceases to be piezoelectric.
	celsius = measure{lowest: -273.15, highest: 573}
)

// boundKeys are the keys that stand in every limit.
var boundKeys = []string{"min", "max", "rule", "confidence"}

// readBounds reads min and max: at least one of them, min below max, and both where a unit can be.
func readBounds(f document.Fields, m measure) Bounds {
	var b Bounds
	if v, ok := m.read(f.Get("min")); ok {
		b.Min = &v
		if v < m.lowest || v >= m.highest {
			f.Get("min").Fault("%s", m.reach("at least", "below"))
		}
	}
	if v, ok := m.read(f.Get("max")); ok {
		b.Max = &v
		if v <= m.lowest || v > m.highest {
			f.Get("max").Fault("%s", m.reach("above", "at most"))
		}
	}
	switch {
	case !f.Get("min").Present() && !f.Get("max").Present():
		f.Fault("want min, max or both, got no bound")
	case b.Min != nil && b.Max != nil && !(*b.Min < *b.Max):
		given, _ := f.Get("min").Text("")
		f.Get("max").Fault("more than the min, %s", given)
	}
	return b
}

// read returns one bound, which may still lie where no unit can be.
func (m measure) read(v document.Value) (float64, bool) {
	if m.unit.symbol != "" {
		return quantity(v, m.unit)
	}
	return v.Number("a number")
}

// reach says where a bound may lie.
func (m measure) reach(low, high string) string {
	symbol := ""
	if m.unit.symbol != "" {
		symbol = " " + m.unit.symbol
	}
	lowest, highest := fmt.Sprintf("%s %g%s", low, m.lowest, symbol), fmt.Sprintf("%s %g%s", high, m.highest, symbol)
	switch {
	case math.IsInf(m.highest, 1):
		return lowest
	case math.IsInf(m.lowest, -1):
		return highest
	}
	return lowest + ", " + highest
}

// readDecide reads what a limit says of its own decision.
func readDecide(f document.Fields) Decide {
	var d Decide
	d.Rule, _ = document.OneOf(f.Get("rule"), Rules()...)
	d.Confidence, _ = readConfidence(f.Get("confidence"))
	return d
}

// readConfidence reads a probability from MinConfidence to MaxConfidence. Below one half a guard band would reach over the limit; above
// the upper end no uncertainty is known well enough to say so.
func readConfidence(v document.Value) (float64, bool) {
	want := fmt.Sprintf("a probability from %g to %g", MinConfidence, MaxConfidence)
	c, ok := v.Number(want)
	if ok && !(c >= MinConfidence && c <= MaxConfidence) {
		v.Fault("%s", want)
		return 0, false
	}
	return c, ok
}
