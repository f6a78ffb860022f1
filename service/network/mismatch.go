package network

import (
	"fmt"
	"math"
	"math/cmplx"
	"strings"
)

// MismatchError says that standards contradict each other or the network, or that a sweep lies where nothing was calibrated. The text is
// for a person and carries the numbers. It is the retest cause calibration_mismatch: the station is to be mended, not the unit.
type MismatchError struct{ Text string }

func (e *MismatchError) Error() string { return "network: calibration mismatch: " + e.Text }

func mismatch(format string, args ...any) error {
	return &MismatchError{Text: fmt.Sprintf(format, args...)}
}

// Band is a span of frequencies in which something holds, both ends included.
type Band struct{ LowHz, HighHz float64 }

// String prints the band in the unit that suits it.
func (b Band) String() string {
	scale, unit := 1.0, "Hz"
	switch {
	case b.HighHz >= 1e6:
		scale, unit = 1e6, "MHz"
	case b.HighHz >= 1e3:
		scale, unit = 1e3, "kHz"
	}
	return fmt.Sprintf("%.9g to %.9g %s", b.LowHz/scale, b.HighHz/scale, unit)
}

// listed prints bands for a message, the first few of many.
func listed(bands []Band) string {
	const shown = 4
	var parts []string
	for _, b := range bands[:min(len(bands), shown)] {
		parts = append(parts, b.String())
	}
	text := strings.Join(parts, ", ")
	if len(bands) > shown {
		text += fmt.Sprintf(" and %d more", len(bands)-shown)
	}
	return text
}

func abs(z complex128) float64 { return cmplx.Abs(z) }

func square(z complex128) float64 { return real(z)*real(z) + imag(z)*imag(z) }

func finite(z complex128) bool {
	s := square(z)
	return !math.IsNaN(s) && !math.IsInf(s, 0)
}
