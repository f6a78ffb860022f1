package resonance

import "testing"

func TestWords(t *testing.T) {
	for _, c := range []struct{ got, want string }{
		{prefixed(1.4712e-12, "F", 3), "1.47 pF"},
		{prefixed(-1.25e-7, "S", 3), minus + "125 nS"},
		{prefixed(36123, "Hz", 3), "36.1 kHz"},
		{prefixed(999.96, "Hz", 3), "1 kHz"},
		{prefixed(1000, "Hz", 3), "1 kHz"},
		{prefixed(747510, "Ω", 2), "750 kΩ"},
		{prefixed(0, "F", 3), "0 F"},
		{prefixed(3e-19, "F", 2), "0.0003 fF"},
		{worded(88, " %", 2), "88 %"},
		{worded(-5.004, "°", 3), minus + "5°"},
		{megahertz(24.9940763e6), "24.99408 MHz"},
		{prefixed(raised(0.0432e-12), "F", 1), "50 fF"},
		{prefixed(raised(1e-14), "F", 1), "10 fF"},
		{times(1.3e5), "130000"},
		{times(186), "190"},
	} {
		if c.got != c.want {
			t.Errorf("%q, want %q", c.got, c.want)
		}
	}
}
