package parttype

import (
	"fmt"
	"math"
	"strconv"
	"testing"

	"pgregory.net/rapid"
)

func TestQuantities(t *testing.T) {
	tests := []struct {
		text   string
		unit   unit
		want   float64
		source string
	}{
		{"25 MHz", hertz, 25e6, "SI Brochure 9, table 7"},
		{"5.5 fF", farad, 5.5e-15, "the literal: one rounding, not 5.5 times 1e-15"},
		{"0.45 fF", farad, 0.45e-15, "the literal"},
		{"10 pF", farad, 10e-12, "the literal"},
		{"0.1 uW", watt, 1e-7, "equal to 100 nW"},
		{"100 nW", watt, 1e-7, "equal to 0.1 uW"},
		{"10 \u00b5W", watt, 10e-6, "SI Brochure 9: micro sign"},
		{"10 \u03bcW", watt, 10e-6, "SI Brochure 9: Greek mu"},
		{"300 ms", second, 0.3, "the literal"},
		{"300ms", second, 0.3, "without a space"},
		{" 3   s ", second, 3, "spaces are free"},
		{"-100 kHz", hertz, -100e3, "a span below the main mode"},
		{"38 kohm", ohm, 38e3, "SI Brochure 9"},
		{"38 k\u03a9", ohm, 38e3, "SI Brochure 9: Greek omega"},
		{"38 k\u2126", ohm, 38e3, "Unicode ohm sign"},
		{"1 Mohm", ohm, 1e6, "mega, not milli"},
		{"1 mohm", ohm, 1e-3, "milli, not mega"},
		{"1 GHz", hertz, 1e9, "SI Brochure 9"},
		{"1.5e-3 pF", farad, 1.5e-15, "exponents add"},
		{".5 F", farad, 0.5, "no digit before the point"},
	}
	for _, test := range tests {
		if test.source == "" {
			t.Errorf("%s: no source", test.text)
		}
		got, ok := parseQuantity(test.text, test.unit)
		if !ok || got != test.want {
			t.Errorf("%q = %v, %v; want %v (%s)", test.text, got, ok, test.want, test.source)
		}
	}
}

func TestNoQuantities(t *testing.T) {
	for _, test := range []struct {
		text string
		unit unit
	}{
		{"", hertz}, {"25", hertz}, {"MHz", hertz}, {"25 M", hertz}, {"25 MHZ", hertz}, {"25 mhz", hertz}, {"25 MHz 3", hertz},
		{"25 THz", hertz}, {"25 kMHz", hertz}, {"25 M Hz", hertz}, {"2 5 MHz", hertz}, {"0x19 MHz", hertz}, {"1_000 Hz", hertz},
		{"inf Hz", hertz}, {"nan Hz", hertz}, {"1e999 Hz", hertz}, {"1e308 GHz", hertz}, {"1e99999999999 Hz", hertz}, {"1.2.3 Hz", hertz},
		{"1,5 Hz", hertz}, {"--1 Hz", hertz}, {"1e Hz", hertz}, {"1e+ Hz", hertz}, {"10 pF", ohm}, {"10 Ohm", ohm}, {"10 ohms", ohm},
		{"10 F", watt}, {"3 sec", second}, {"\uff11 Hz", hertz},
	} {
		if got, ok := parseQuantity(test.text, test.unit); ok {
			t.Errorf("%q in %s = %v, want none", test.text, test.unit.symbol, got)
		}
	}
}

// Every decimal number with a prefix is the float64 that Go makes of the same digits with the exponent written out.
func TestQuantityIsRoundedOnce(t *testing.T) {
	prefixes := map[string]int{"f": -15, "p": -12, "n": -9, "u": -6, "m": -3, "": 0, "k": 3, "M": 6, "G": 9}
	rapid.Check(t, func(t *rapid.T) {
		mantissa := strconv.FormatFloat(rapid.Float64Range(-1e6, 1e6).Draw(t, "mantissa"), 'f', rapid.IntRange(-1, 20).Draw(t, "digits"), 64)
		prefix := rapid.SampledFrom([]string{"f", "p", "n", "u", "m", "", "k", "M", "G"}).Draw(t, "prefix")
		want, err := strconv.ParseFloat(fmt.Sprintf("%se%d", mantissa, prefixes[prefix]), 64)
		if err != nil {
			t.Fatal(err)
		}
		got, ok := parseQuantity(mantissa+" "+prefix+"F", farad)
		if !ok || math.Float64bits(got) != math.Float64bits(want) {
			t.Fatalf("%s %sF = %v, %v; want %v", mantissa, prefix, got, ok, want)
		}
	})
}
