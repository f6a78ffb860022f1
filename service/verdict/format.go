package verdict

import (
	"math"
	"strconv"
	"strings"
)

// The unit symbols of findings. Inside the program every value is in these units; screens show them with prefixes.
const (
	UnitHertz    = "Hz"
	UnitOhm      = "ohm"
	UnitFarad    = "F"
	UnitHenry    = "H"
	UnitWatt     = "W"
	UnitPPM      = "ppm"
	UnitPPMPerPF = "ppm/pF"
	UnitDecibel  = "dB"
	UnitNone     = "1"
)

// prefixes of the SI from femto to giga, by power of a thousand.
var prefixes = map[int]string{-5: "f", -4: "p", -3: "n", -2: "µ", -1: "m", 0: "", 1: "k", 2: "M", 3: "G"}

// symbol returns how a unit is written on a screen, and whether it takes a prefix.
func symbol(unit string) (text string, prefixed bool) {
	switch unit {
	case UnitOhm:
		return "Ω", true
	case UnitHertz, UnitFarad, UnitHenry, UnitWatt:
		return unit, true
	case UnitNone:
		return "", false
	}
	return unit, false
}

// Format writes a value with its expanded uncertainty (k = 2), to two figures of the uncertainty: "48.20 ± 0.62 Ω". Both share one prefix,
// unless the uncertainty is so small beside the value that it reads better with its own: "24.9940754 MHz ± 1.8 Hz". A standard
// uncertainty of 0 leaves nine significant figures and no ±.
func Format(v Value, unit string) string {
	name, prefixed := symbol(unit)
	power := 0
	if prefixed {
		power = prefixPower(v.Value)
	}
	scale := math.Pow(1000, float64(-power))
	value, expanded := v.Value*scale, 2*v.StandardUncertainty*scale
	with := func(text string, power int) string { return strings.TrimRight(text+" "+prefixes[power]+name, " ") }
	if !(expanded > 0) || math.IsInf(expanded, 0) {
		return with(plain(value), power)
	}
	text := number(value, decimalsFor(expanded))
	if own := prefixPower(2 * v.StandardUncertainty); prefixed && own < power && expanded < 1e-4*math.Abs(value) {
		small := 2 * v.StandardUncertainty * math.Pow(1000, float64(-own))
		return with(text, power) + " ± " + with(number(small, decimalsFor(small)), own)
	}
	return with(text+" ± "+number(expanded, decimalsFor(expanded)), power)
}

// FormatBound writes a limit as a person gave it: shortest digits, with a prefix.
func FormatBound(value float64, unit string) string {
	name, prefixed := symbol(unit)
	power := 0
	if prefixed {
		power = prefixPower(value)
	}
	return strings.TrimRight(plain(value*math.Pow(1000, float64(-power)))+" "+prefixes[power]+name, " ")
}

// prefixPower returns the power of a thousand that leaves one to three digits before the point.
func prefixPower(v float64) int {
	if v == 0 || math.IsInf(v, 0) || math.IsNaN(v) {
		return 0
	}
	p := int(math.Floor(math.Log10(math.Abs(v))/3 + 1e-12))
	return max(-5, min(3, p))
}

// decimalsFor returns how many decimals show two figures of the uncertainty.
func decimalsFor(u float64) int {
	return max(0, 1-int(math.Floor(math.Log10(u))))
}

// number writes v with a fixed count of decimals and the typographic minus sign.
func number(v float64, decimals int) string {
	return strings.Replace(strconv.FormatFloat(v, 'f', decimals, 64), "-", "−", 1)
}

// plain writes v with at most nine significant figures and no trailing zeros.
func plain(v float64) string {
	return strings.Replace(strconv.FormatFloat(v, 'g', 9, 64), "-", "−", 1)
}
