package resonance

import (
	"math"
	"strconv"
	"strings"
)

// The Detail of an estimate is read by a person on the floor: numbers come with a prefix to their unit, with the typographic minus, and never in
// powers of ten.

// minus is the typographic minus, as wide as a plus.
const minus = "\u2212"

// prefixes go from femto to giga, three powers of ten each.
var prefixes = [...]string{"f", "p", "n", "µ", "m", "", "k", "M", "G"}

// ofOne is the place of no prefix among them.
const ofOne = 5

// prefixed writes a value with so many significant digits and the prefix that leaves one to three before the point: 1.47 pF, 5 kHz.
func prefixed(value float64, unit string, digits int) string {
	if value == 0 || math.IsNaN(value) || math.IsInf(value, 0) {
		return plain(value, digits) + " " + unit
	}
	value = rounded(value, digits) // 999.9 at three digits is 1 k
	step := int(math.Floor(math.Log10(math.Abs(value)*(1+1e-12)) / 3))
	step = max(-ofOne, min(step, len(prefixes)-1-ofOne))
	return plain(value/math.Pow(1000, float64(step)), digits) + " " + prefixes[ofOne+step] + unit
}

// worded writes a value with so many significant digits and its unit as it stands: 5.01°, 88 %.
func worded(value float64, unit string, digits int) string { return plain(value, digits) + unit }

// megahertz writes a frequency with seven digits.
func megahertz(frequencyHz float64) string { return plain(frequencyHz/1e6, 7) + " MHz" }

// times writes a ratio as a person says it: two digits, whole from ten up.
func times(ratio float64) string { return plain(ratio, 2) }

// plain writes a number with so many significant digits, without zeros after the last one that counts and without an exponent.
func plain(value float64, digits int) string {
	text := strconv.FormatFloat(rounded(value, digits), 'f', -1, 64)
	return strings.Replace(text, "-", minus, 1)
}

// rounded returns the value of so many significant digits.
func rounded(value float64, digits int) float64 {
	r, err := strconv.ParseFloat(strconv.FormatFloat(value, 'e', digits-1, 64), 64)
	if err != nil {
		return value
	}
	return r
}

// raised returns the next value of one significant digit above: 0.0432 is less than 0.05.
func raised(value float64) float64 {
	if !(value > 0) || math.IsInf(value, 0) {
		return value
	}
	decade := math.Pow(10, math.Floor(math.Log10(value)))
	return math.Ceil(value/decade*(1-1e-12)) * decade
}
