package document

import (
	"math"
	"strconv"
)

// Decimal returns the float64 nearest to x * 10^exponent for the decimal number x in text: digits with at most one point and an optional
// exponent, and nothing else (no hexadecimal, no underscores, no infinity). The exponent is added to that of the text before the only
// rounding, so 5.5 with exponent -15 is the same number as 5.5e-15. Not ok: no such number, or one beyond the range of a float64.
func Decimal(text string, exponent int) (value float64, ok bool) {
	i := 0
	if i < len(text) && (text[i] == '+' || text[i] == '-') {
		i++
	}
	digits := 0
	for point := false; i < len(text); i++ {
		if c := text[i]; c == '.' && !point {
			point = true
		} else if c >= '0' && c <= '9' {
			digits++
		} else {
			break
		}
	}
	if digits == 0 {
		return 0, false
	}
	mantissa := text[:i]
	if i < len(text) {
		if text[i] != 'e' && text[i] != 'E' {
			return 0, false
		}
		own, ok := whole(text[i+1:])
		if !ok {
			return 0, false
		}
		exponent += own
	}
	value, err := strconv.ParseFloat(mantissa+"e"+strconv.Itoa(exponent), 64)
	return value, err == nil && !math.IsInf(value, 0)
}

// whole reads a whole number of at most nine digits.
func whole(text string) (int, bool) {
	digits := text
	if digits != "" && (digits[0] == '+' || digits[0] == '-') {
		digits = digits[1:]
	}
	if digits == "" || len(digits) > 9 {
		return 0, false
	}
	for _, c := range []byte(digits) {
		if c < '0' || c > '9' {
			return 0, false
		}
	}
	n, err := strconv.Atoi(text)
	return n, err == nil
}
