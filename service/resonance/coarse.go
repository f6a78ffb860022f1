package resonance

import "fmt"

// usualLoadedQuality stands for the unit where none is expected: 27000 is that of a 25 MHz unit of 18 ohm between two of 12.5.
const usualLoadedQuality = 2e4

// coarse returns what to add to the words about a sweep without a resonance when one could lie between its points: when they are further apart
// than half the loaded width of the expected unit. A resonance of less than two steps has fewer than two points that show it, and
// those are wild points. Empty for a sweep that is fine enough.
func (f *Fitter) coarse() string {
	width := 2 * f.expectedHalfHz()
	if width == 0 {
		width = f.points.referenceHz / usualLoadedQuality
	}
	low, high := f.points.span()
	step := (high - low) / float64(f.points.n-1)
	if step <= width/2 {
		return ""
	}
	return fmt.Sprintf("; the points lie %s apart, a resonance narrower than %s between them could not be seen",
		prefixed(step, "Hz", 3), prefixed(2*step, "Hz", 3))
}
