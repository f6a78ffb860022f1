package parttype

import (
	"strings"

	"example.com/admit/service/parttype/document"
)

// unit is what a dimensional value is measured in. The example shows a person how to write one.
type unit struct{ symbol, example string }

// The units of a limits file.
var (
	hertz  = unit{"Hz", "a frequency such as 25 MHz"}
	farad  = unit{"F", "a capacitance such as 10 pF"}
	ohm    = unit{"ohm", "a resistance such as 40 ohm"}
	watt   = unit{"W", "a power such as 10 uW"}
	second = unit{"s", "a time such as 300 ms"}
)

// parseQuantity returns text, a decimal number with prefix and unit, in the unit without prefix: "5.5 fF" is 5.5e-15, the very float64
// that Go makes of that literal, because the prefix joins the exponent before the only rounding. Spaces between number and unit are free.
// Prefixes are f p n u m k M G; u may be the Greek mu, ohm the Greek omega, in either of their code points.
func parseQuantity(text string, u unit) (value float64, ok bool) {
	bare, ok := cutUnit(strings.TrimSpace(text), u)
	if !ok {
		return 0, false
	}
	number, exponent := cutPrefix(bare)
	return document.Decimal(strings.TrimRight(number, " "), exponent)
}

// cutUnit takes the unit off the end of text. Case counts: mHz and MHz are nine orders apart.
func cutUnit(text string, u unit) (string, bool) {
	if u == ohm {
		for _, omega := range []string{"\u03a9", "\u2126"} { // the letter, and the sign that looks like it
			if bare, found := strings.CutSuffix(text, omega); found {
				return bare, true
			}
		}
	}
	return strings.CutSuffix(text, u.symbol)
}

// cutPrefix takes an SI prefix off the end of text and returns its power of ten.
func cutPrefix(text string) (number string, exponent int) {
	for _, p := range []struct {
		symbol   string
		exponent int
	}{
		{"f", -15}, {"p", -12}, {"n", -9}, {"u", -6}, {"\u00b5", -6}, {"\u03bc", -6}, {"m", -3}, {"k", 3}, {"M", 6}, {"G", 9},
	} {
		if number, found := strings.CutSuffix(text, p.symbol); found {
			return number, p.exponent
		}
	}
	return text, 0
}

// quantity reads a dimensional value and notes a fault where the number, the prefix or the unit is not as expected.
func quantity(v document.Value, u unit) (float64, bool) {
	text, ok := v.Text(u.example)
	if !ok {
		return 0, false
	}
	value, ok := parseQuantity(text, u)
	if !ok {
		v.Fault("%s (a number, one of the prefixes f p n u m k M G or none, %s)", u.example, u.symbol)
	}
	return value, ok
}

// positive reads a dimensional value above 0.
func positive(v document.Value, u unit) (float64, bool) {
	value, ok := quantity(v, u)
	if ok && !(value > 0) {
		v.Fault("more than 0 %s", u.symbol)
		return 0, false
	}
	return value, ok
}
