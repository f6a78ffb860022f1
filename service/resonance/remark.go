package resonance

import (
	"fmt"
	"math"
)

const (
	// remarkableShare of the response is systematic residual worth a word; what an instrument leaves of its filters stays below.
	remarkableShare = 0.001

	// remarkableChiSquare, or its inverse, contradicts the stated noise: twice as much scatter, or half of it. A receiver's noise is not
	// known better.
	remarkableChiSquare = 4.0
)

// remark says what is remarkable about what was found.
func (f *Fitter) remark(est *Estimate, visible float64) {
	add := func(sentence string) {
		if est.Detail != "" {
			est.Detail += " "
		}
		est.Detail += sentence
	}
	if f.request.ScaleUnknown {
		add(loadedOnly)
	}
	if share := f.seen.systematic() / visible; f.seen.significant() && share > remarkableShare {
		add(fmt.Sprintf("The residual is not white: its correlation from point to point is %s, and %s of the response is systematic. "+
			"Another response may lie nearby; the uncertainties are widened for it.", plain(f.seen.correlation, 2), worded(100*share, " %", 2)))
		return // which is what chi-square would say
	}
	if chi := est.Quality.ReducedChiSquare; chi > 0 && f.contradicts(chi) {
		ratio, than := math.Sqrt(chi), "more"
		if chi < 1 {
			ratio, than = 1/ratio, "less"
		}
		add(fmt.Sprintf("The samples scatter %s times %s than the stated noise of the receiver.", times(ratio), than))
	}
}

// contradicts says that a reduced chi-square is not that of the stated noise: by its size, and beyond six standard deviations, sqrt(2/freedom)
// each, of chance.
func (f *Fitter) contradicts(chi float64) bool {
	freedom := math.Max(float64(f.seen.parts*f.seen.points-f.problem.parameters()), 1)
	return (chi > remarkableChiSquare || chi < 1/remarkableChiSquare) && math.Abs(chi-1) > 6*math.Sqrt(2/freedom)
}
