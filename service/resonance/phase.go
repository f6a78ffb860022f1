package resonance

import (
	"fmt"
	"math"
	"math/cmplx"

	"example.com/admit/service/network"
)

// mostTurned is how far a free phase may land from the calibration, in standard deviations of what is stated of the network's phase and of
// the fit itself together. Beyond, the sweep was not taken in the state that the calibration describes, and a phase that
// explains it must not be taken for a unit measured well.
const mostTurned = 5.0

// ofPhase says whether an influence is a turn of all samples of the network.
func ofPhase(c *network.Contribution) bool {
	return c.Name == network.InfluencePhaseDrift || c.Name == network.InfluenceNominalPhase
}

// statedPhase returns the standard uncertainty of the network's phase in radians, as the influences have it: T exp(j dphi) is A and B off by
// that factor. 0 if none is stated.
func (f *Fitter) statedPhase() float64 {
	t := f.request.Terms
	sum := 0.0
	for k := range f.request.Contributions {
		c := &f.request.Contributions[k]
		i := f.points.n / 2
		if !ofPhase(c) || len(c.Terms.A) != f.points.n || len(c.Terms.B) != f.points.n {
			continue
		}
		before, after := t.B[i], c.Terms.B[i]
		if before == 0 {
			before, after = t.A[i], c.Terms.A[i]
		}
		if before != 0 {
			sum = math.Hypot(sum, cmplx.Phase(after/before))
		}
	}
	return sum
}

// turned says that the free phase of the fit is not what drifts since the calibration, and by how much it is too far.
func (f *Fitter) turned(est *Estimate) bool {
	if f.request.ScaleUnknown || !est.Fitted[PhaseRad] {
		return false
	}
	stated := f.statedPhase()
	phase := est.Quality.FreePhaseRad
	if stated == 0 || math.Abs(phase) <= mostTurned*math.Hypot(stated, est.Quality.FreePhaseSigma) {
		return false
	}
	const degree = math.Pi / 180
	est.State = CalibrationMismatch
	est.Detail = fmt.Sprintf("the samples are turned by %s against the calibration, of which a standard uncertainty of %s is stated",
		worded(phase/degree, "°", 3), worded(stated/degree, "°", 2))
	return true
}

// withoutPhase turns the shift of a fit with a free phase into that of the same fit with the phase held, by the covariance c of the former:
//
//	shift_held = shift - c[.][phase] shift[phase]/c[phase][phase]
//
// A free phase would take up all of a turn, and a sweep that needed one would then be stated with less uncertainty than one that did not. But
// what turned the samples is not known to have turned them alike at the standards, so the stated share stays.
func withoutPhase(shift *[Parameters]float64, c *Matrix) {
	variance := c[PhaseRad][PhaseRad]
	if !(variance > 0) {
		return
	}
	by := shift[PhaseRad] / variance
	for p := range shift {
		shift[p] -= c[p][PhaseRad] * by
	}
}
