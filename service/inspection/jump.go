package inspection

import (
	"fmt"
	"math"

	"example.com/admit/service/leastsquares"
	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/verdict"
)

// A contact that changes in the middle of a sweep puts another resistance in series with the unit from there on. The trace is that of no unit, and the fit
// says so; but a unit with a step in its series resistance describes it to the noise, and tells the operator what to do: clean the contacts.

// jumped is that model: one linear unit, and behind a point of the sweep a resistance in series with it.
type jumped struct {
	bent
	cut    int
	linear []float64 // scratch
}

// The parameters are those of a bent trace up to the shunt capacitance, then the resistance in units of R1.
const (
	jumpResistance = bentSlope
	jumpParameters = jumpResistance + 1
)

// Evaluate writes residuals and their derivatives.
func (m *jumped) Evaluate(params, residual, jacobian []float64) {
	differences(m.residuals, &m.moved, params, residual, jacobian)
}

func (m *jumped) residuals(params, residual []float64) {
	m.linear = append(append(m.linear[:0], params[:jumpResistance]...), 0, 0)
	u := m.unit(m.linear)
	u.phase = 0
	step := complex(params[jumpResistance]*u.ohm, 0)
	for i, s := range m.sample {
		y := m.admittance(i, &u, 1)
		if i >= m.cut {
			y /= 1 + step*y
		}
		d := s - m.terms.Sample(i, y)
		residual[2*i], residual[2*i+1] = real(d), imag(d)
	}
}

// Cuts tried, and the least change that is told of, in parts of the sweep.
const (
	jumpCuts  = 16
	leastEdge = 12 // points on either side
)

// lookForJump looks whether the main sweep is that of a unit whose contact changed on the way. A unit that depends on its drive may wake in the middle of a
// sweep, which looks the same: the drive series is judged first.
func (w *workup) lookForJump(b *bench) error {
	if w.main < 0 {
		return nil
	}
	main := w.fits[w.main]
	est := main.est
	suspect := est.State == resonance.Misfit || est.State == resonance.CalibrationMismatch
	if !suspect || !readable(est) || !w.g.scale || w.g.solved == nil || !main.sweep.Quantity.Complex() || w.dependsOnDrive() {
		return nil
	}
	if err := w.g.solved.Terms(&b.terms, main.sweep.FrequencyHz, main.sweep.Quantity); err != nil || b.terms.D != 1 {
		return nil
	}
	req := resonance.Request{Terms: &b.terms, NoiseRMS: network.SampleNoise(w.c.Calibration, main.sweep)}
	if cal := w.c.Calibration; cal != nil {
		req.ClockOffset = cal.ReferenceClockOffsetPPM * 1e-6
	}
	m := &jumped{bent: *newBent(main, &req)}
	n := len(m.sample)
	residual := make([]float64, 2*n)
	params := make([]float64, jumpParameters)
	m.residuals(params, residual)
	before := sumOfSquares(residual)
	var workspace leastsquares.Workspace
	try := func(cut int) leastsquares.Result {
		m.cut = cut
		clear(params)
		return workspace.Fit(m, 2*n, params, leastsquares.Options{ComplexPairs: true, IterationLimit: 12})
	}
	cost := func(cut int) float64 {
		if cut < leastEdge || cut > n-leastEdge {
			return math.Inf(1)
		}
		return try(cut).SumOfSquares
	}
	best := leastCut(n, cost)
	if best < leastEdge {
		return nil
	}
	result := try(best)
	left := math.Sqrt(2 * result.SumOfSquares / float64(max(1, result.DegreesOfFreedom)))
	gain := 2 * float64(n) * math.Log(before/result.SumOfSquares)
	ohm := math.Exp(est.Value[resonance.LogResistance] + params[bentResistance])
	change := params[jumpResistance] * ohm
	u := math.Sqrt(workspace.Covariance()[jumpResistance*jumpParameters+jumpResistance]*result.ResidualVariance) * ohm
	allowed := w.contactAllows(verdict.Value{Value: change, StandardUncertainty: u})
	if gain > bentGain && m.white(left, &req) && math.Abs(change) > allowed {
		est.State = resonance.State(verdict.UnstableContact)
		est.Detail = fmt.Sprintf("R1 changed from %.4g Ω by %.3g Ω within the main sweep, at point %d; the contact explains %.2g Ω", ohm, change, best, allowed)
	}
	return nil
}

// leastCut returns the cut of least cost among n points: a coarse row of cuts, and from every dip in it downhill by halved steps.
func leastCut(n int, cost func(cut int) float64) (best int) {
	var row [jumpCuts + 1]float64
	for k := range row {
		row[k] = math.Inf(1)
		if k > 0 && k < jumpCuts {
			row[k] = cost(n * k / jumpCuts)
		}
	}
	least := math.Inf(1)
	for k := 1; k < jumpCuts; k++ {
		if row[k] > row[k-1] || row[k] > row[k+1] {
			continue
		}
		at, low := n*k/jumpCuts, row[k]
		for step := n / jumpCuts / 2; step > 0; step /= 2 {
			for _, next := range [2]int{at - step, at + step} {
				if c := cost(next); c < low {
					at, low = next, c
				}
			}
		}
		if low < least {
			best, least = at, low
		}
	}
	return best
}
