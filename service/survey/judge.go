package survey

import (
	"fmt"
	"math"
	"time"

	"example.com/admit/service/leastsquares"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// misfitShare is the systematic residual, as a share of the strongest response, that no crystal unit in this network leaves.
const misfitShare = 0.04

// admissible says whether shapes and quantity allow a survey at all. A sweep that sweep.Check would refuse, or terms of another sweep, is
// answered with Misfit and the reason: the caller has skipped a check, and no number may come of it.
func (v *Surveyor) admissible(out *Result) bool {
	s := v.request.Sweep
	n := len(s.FrequencyHz)
	refuse := func(format string, args ...any) bool {
		out.State, out.Detail = resonance.Misfit, fmt.Sprintf(format, args...)
		return false
	}
	switch {
	case n < sweep.MinPoints:
		return refuse("%d points are too few for a survey; %d are the least", n, sweep.MinPoints)
	case !s.Quantity.Complex():
		return refuse("magnitudes do not show a mode weaker than the shunt capacitance; a survey needs complex samples")
	case len(s.Re) != n || len(s.Im) != n:
		return refuse("%d frequencies but %d and %d samples", n, len(s.Re), len(s.Im))
	case s.Grid != nil && s.Grid.Points != n:
		return refuse("%d frequencies but a grid of %d points", n, s.Grid.Points)
	}
	if low, high := s.SpanHz(); !(high > low && low > 0) {
		return refuse("every point at %g Hz", low)
	}
	if v.request.ScaleUnknown {
		return true
	}
	t := v.request.Terms
	if t == nil || len(t.A) != n || len(t.B) != n || len(t.C) != n {
		return refuse("the terms of the fixture network are not those of this sweep")
	}
	if t.D != 0 && t.D != 1 {
		return refuse("terms with D = %g; D is 0 or 1", t.D)
	}
	return true
}

// describe fills the quality that does not depend on the order of the modes.
func (v *Surveyor) describe(out *Result) {
	s, m, q := &v.samples, &v.model, &out.Quality
	q.Points, q.WildPoints = s.n, v.wild
	q.Tests, q.Threshold = v.tests, v.threshold
	q.Rounds, q.Iterations = v.rounds, v.iterations
	q.ResidualCorrelation = correlation(v.residual, 1)
	q.Memory = m.memory
	q.DwellSeconds = s.dwell * math.Exp(m.value(v.now.params, timeStretch))
	q.Converged = v.now.status == leastsquares.Converged
	out.More = v.more
	v.hides = v.hides[:0]
	for k := range v.now.modes {
		v.hides = append(v.hides, m.lobeOf(v.now.params, k))
	}
	if s.dwell > 0 {
		q.SettledWidthHz = settledTimeConstants / (math.Pi * s.dwell)
	}
	if k := v.strongest(); k >= 0 {
		l := m.lobeOf(v.now.params, k)
		if !(v.visible(l) > 0) {
			return // its point was left out
		}
		q.SNRDecibel = 20 * math.Log10(v.visible(l)/math.Sqrt(v.variance))
		q.ResidualOverPeak = math.Sqrt(v.now.sum/float64(s.n)) / v.visible(l)
	}
}

// judge turns what was found into an answer.
func (v *Surveyor) judge(out *Result) {
	s, q := &v.samples, &out.Quality
	correlated := math.Max(q.ResidualCorrelation-significant(s.n), 0)
	systematic := q.ResidualOverPeak * math.Sqrt(correlated)
	narrowest := v.longestRinging(out)
	if s.dwell > 0 && narrowest >= 0 {
		q.SettlingTimeConstants = s.dwell / out.Modes[narrowest].TimeConstantSeconds
	}
	out.State = resonance.Found
	switch {
	case len(out.Modes) == 0 && v.model.neighbour == nil:
		out.State = resonance.NoResonance
		out.Detail = fmt.Sprintf("no mode stands out of %d points between %.7g and %.7g MHz",
			s.n, (s.referenceHz+s.lowHz)/1e6, (s.referenceHz+s.highHz)/1e6)
	case v.tooFast(narrowest, q, systematic):
		out.State = resonance.SweptTooFast
		needed := time.Duration(settledTimeConstants * out.Modes[narrowest].TimeConstantSeconds * 1e9).Round(time.Microsecond)
		out.Detail = fmt.Sprintf("a dwell of %v is %.2g time constants of the mode at %.7g MHz; a settled survey needs %v",
			v.request.Sweep.Timing.Dwell, q.SettlingTimeConstants, out.Modes[narrowest].FrequencyHz.Value/1e6, needed)
		switch s.phase {
		case sweep.PhaseRestarted:
			out.Detail += ", since the source restarts its phase at each step"
		case sweep.PhaseUnstated:
			out.Detail += ", unless the source is stated to go on with its phase at each step"
		}
	case systematic > misfitShare:
		out.State = resonance.Misfit
		out.Detail = fmt.Sprintf("modes in this network leave %.1f %% of the strongest response unexplained", 100*systematic)
	case v.more:
		out.Detail = fmt.Sprintf("the search ended at %d modes; there may be more", len(out.Modes))
	}
}

// longestRinging returns the mode with the longest time constant among those of which the width is known, or -1. A mode that lives on one point may
// be as narrow as one likes.
func (v *Surveyor) longestRinging(out *Result) int {
	const known = 0.3 // relative standard uncertainty
	best := -1
	for i := range out.Modes {
		m := &out.Modes[i]
		if !m.Outside && m.LoadedWidthHz.Statistical < known*m.LoadedWidthHz.Value &&
			(best < 0 || m.TimeConstantSeconds > out.Modes[best].TimeConstantSeconds) {
			best = i
		}
	}
	return best
}

// tooFast says that modes still rang from earlier points and that nothing in the model stands for it: nothing that is there, or, where nobody
// stated that the phase goes on, nothing that explains the samples.
func (v *Surveyor) tooFast(narrowest int, q *Quality, systematic float64) bool {
	const unexplained = misfitShare / 4
	s := &v.samples
	if s.dwell <= 0 || narrowest < 0 || q.SettlingTimeConstants >= settledTimeConstants {
		return false
	}
	return !q.Memory || s.phase == sweep.PhaseUnstated && systematic > unexplained
}
