package resonance

import (
	"math"

	"example.com/admit/service/uncertainty"
)

// A shunt conductance, a free phase of all samples and a factor on the timing are parameters only where the sweep itself asks for them. The rule, for each:
//
//  1. it is identifiable: what the other parameters cannot imitate of its derivative is more than leastPart of it. In a narrow
//     window of a reflection a turn of the reference plane looks exactly like another C0, R1 and L1, and no significance can make up
//     for that: the smallest error of the model would be blown up by the inverse of that part;
//  2. it is significant: the likelihood gains more than leastGain (five standard deviations), so that in a million sweeps without
//     it none loses precision to it; with few points left over the noise itself is uncertain, and Student's distribution asks for more;
//  3. it explains: of what is systematic in the residual it takes away at least a third, and where noise hides that from point to point nothing
//     is left that hangs together over a loaded width. A neighbouring mode is not mopped up by a phase.
//
// A phase left out is still reported with its standard deviation (Quality.FreePhaseRad), so that drift of the reference plane can be named.
const (
	leastPart      = 0.03
	leastGain      = 25.0
	mostChance     = 6e-7 // two-sided, of five standard deviations
	leastExplained = 1.0 / 3
)

// extra is a parameter that is not in the model, as the solution sees it to first order.
type extra struct {
	value, deviation float64 // where it would go, and its standard deviation at the present noise
	part             float64 // length of its derivative that the other parameters cannot imitate, over the whole length
	gain             float64 // of twice the log-likelihood
	freedom          float64 // degrees of freedom of the deviation
	explained        float64 // sum of squares that it would take away
}

// optional lists the parameters that extend may add, in the order in which they are looked at.
var optional = [...]Parameter{ShuntConductanceSiemens, PhaseRad, logStretch}

// has says whether an optional parameter is in the model.
func (m *forward) has(p Parameter) bool { return m.column(p) >= 0 }

// with returns the model with an optional parameter added.
func (m forward) with(p Parameter) forward {
	switch p {
	case ShuntConductanceSiemens:
		m.conductance = true
	case PhaseRad:
		m.phase = true
	case logStretch:
		m.stretched = true
	}
	return m
}

// carry puts parameters of this model into the vector of another; what this one does not have is 0.
func (m *forward) carry(to *forward, from, into []float64) {
	for p := ResonanceHz; p <= logStretch; p++ {
		if k := to.column(p); k >= 0 {
			into[k] = m.value(from, p)
		}
	}
}

// extend adds G0, a free phase and, for a resonator that rings, a factor on the timing to the fit where the rule asks for them.
func (f *Fitter) extend(est *Estimate) {
	for range optional {
		extras := f.extras()
		est.Quality.FreePhaseRad, est.Quality.FreePhaseSigma = 0, 0
		if phase := extras[1]; phase.part > leastPart {
			est.Quality.FreePhaseRad, est.Quality.FreePhaseSigma = phase.value, phase.deviation
		}
		best := -1
		for i, e := range extras {
			if e.part > leastPart && e.gain > leastGain && e.chance() < mostChance && (best < 0 || e.gain > extras[best].gain) {
				best = i
			}
		}
		if best < 0 || !f.refit(optional[best]) {
			return
		}
	}
}

// refit fits the model with one parameter more from the present solution. If that gains nothing or explains nothing, the solution before
// stands.
func (f *Fitter) refit(p Parameter) bool {
	model, old, seen := f.forward, f.best, f.seen
	next := &f.tried.solution[0]
	*next = solution{robust: old.robust}
	f.forward = model.with(p)
	model.carry(&f.forward, old.params[:], next.params[:])
	threshold := 0.0
	if old.robust {
		threshold = f.huberThreshold(seen.typical)
	}
	if f.solve(next, threshold, finalIterations) {
		before, left := seen.systematic(), f.seen.systematic()
		explained := !seen.significant() && f.together() == 1 || left*left < before*before*(1-leastExplained)
		if f.seen.gain(seen.rms*seen.rms, f.seen.rms*f.seen.rms) > leastGain/2 && explained {
			f.best = *next
			return true
		}
	}
	f.forward, f.best = model, old
	f.solve(&f.best, threshold, finalIterations)
	return false
}

// extras looks at the optional parameters through the linearised fit: with c the derivative of the residual e by the new parameter and c' what
// is left of c beside the columns of the model, the parameter would move by -c'e/c'c', to a gain of n ln of the ratio of the sums of squares.
func (f *Fitter) extras() (found [len(optional)]extra) {
	full := f.forward
	full.conductance, full.phase, full.stretched = true, true, full.memory
	rows := 2 * f.points.n
	f.wide = grown(f.wide, rows*(full.parameters()+1))
	residual, jacobian := f.wide[:rows], f.wide[rows:]
	params := &f.tried.solution[0].params
	f.forward.carry(&full, f.best.params[:], params[:])
	full.Evaluate(params[:full.parameters()], residual, jacobian)
	for i, p := range optional {
		if full.has(p) && !f.forward.has(p) {
			found[i] = f.beside(full.columnOf(jacobian, p), residual)
		}
	}
	return found
}

// beside examines a column, the derivative of the residuals by something that is not in the model, beside the columns that are.
func (f *Fitter) beside(column, residual []float64) (e extra) {
	rows := len(residual)
	var response [mostParameters]float64
	n := f.problem.parameters()
	f.workspace.Response(response[:n], column)
	jacobian := f.workspace.Jacobian()
	f.shift = grown(f.shift, rows)
	copy(f.shift, column)
	for k := range n {
		by := response[k]
		for i, d := range jacobian[k*rows : (k+1)*rows] {
			f.shift[i] += by * d
		}
	}
	limit := f.seen.limit
	var whole, left, product float64
	for i := 0; i < rows; i += 2 {
		if r := residual[i]*residual[i] + residual[i+1]*residual[i+1]; r > limit {
			continue // wild
		}
		whole += column[i]*column[i] + column[i+1]*column[i+1]
		re, im := f.shift[i], f.shift[i+1]
		left += re*re + im*im
		product += re*residual[i] + im*residual[i+1]
	}
	if !(left > 0 && whole > 0) {
		return e
	}
	sum := f.seen.sumOfSquares
	e.explained = product * product / left
	remaining := math.Max(sum-e.explained, 1e-12*sum)
	freedom := math.Max(float64(2*f.seen.points-n-1), 1)
	e.value, e.deviation = -product/left, math.Sqrt(remaining/freedom/left)
	e.part, e.gain, e.freedom = math.Sqrt(left/whole), f.seen.gain(sum, remaining), freedom
	return e
}

// chance returns the probability that noise alone would move the parameter as far.
func (e *extra) chance() float64 {
	if !(e.deviation > 0) {
		return 1
	}
	return 2 * uncertainty.StudentTail(math.Abs(e.value)/e.deviation, e.freedom)
}
