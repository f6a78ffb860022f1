package resonance

import (
	"fmt"

	"example.com/admit/service/sweep"
)

// admissible says whether shapes and quantity allow a fit at all. A sweep that sweep.Check would refuse, or terms of another sweep, is
// answered with Misfit and the reason: the caller has skipped a check, and no number may come of it.
func (f *Fitter) admissible(est *Estimate) bool {
	s := f.request.Sweep
	n := len(s.FrequencyHz)
	refuse := func(format string, args ...any) bool {
		est.State, est.Detail = Misfit, fmt.Sprintf(format, args...)
		return false
	}
	switch {
	case n < sweep.MinPoints:
		return refuse("%d points are too few to fit a resonance; %d are the least", n, sweep.MinPoints)
	case len(s.Re) != n || s.Quantity.Complex() && len(s.Im) != n:
		return refuse("%d frequencies but %d and %d samples", n, len(s.Re), len(s.Im))
	case s.Grid != nil && s.Grid.Points != n:
		return refuse("%d frequencies but a grid of %d points", n, s.Grid.Points)
	}
	if low, high := s.SpanHz(); !(high > low && low > 0) {
		return refuse("every point at %g Hz", low)
	}
	if f.request.ScaleUnknown {
		return true
	}
	t := f.request.Terms
	if t == nil || len(t.A) != n || len(t.B) != n || len(t.C) != n {
		return refuse("the terms of the fixture network are not those of this sweep")
	}
	if t.D != 0 && t.D != 1 {
		return refuse("terms with D = %g; D is 0 or 1", t.D)
	}
	return true
}
