package inspection

import (
	"math"
	"math/cmplx"

	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// shuntNote says which of the two shunt capacitances a limit was held against.
const shuntNote = "read away from all modes"

// shuntFit is the shunt capacitance of a unit away from its modes. In the window of the main mode the neighbours outside of it look like a part of C0,
// some tenths of a picofarad; what a fit finds there is the apparent C0. Away from all modes only their static part is left.
type shuntFit struct {
	farad, siemens  float64 // C0 and G0
	variance        float64 // of C0, from noise
	shifts          []influence
	residual, noise float64 // rms of what is left, and of the receiver where it is known
	share           float64 // residual over what C0 does to a sample
}

// readShunt reads the first sweep of role shunt-capacitance, if there is one: the samples less the main mode, fitted with C0 and G0.
func (w *workup) readShunt(b *bench) error {
	for i := range w.c.Sweeps {
		s := &w.c.Sweeps[i]
		if s.Role != sweep.ShuntCapacitance {
			continue
		}
		if w.g.solved == nil || !w.g.scale || !s.Quantity.Complex() {
			return nil
		}
		if err := w.g.solved.Terms(&b.terms, s.FrequencyHz, s.Quantity); err != nil || b.terms.D != 1 {
			w.remark("The shunt-capacitance sweep lies outside the calibrated bands and was not read.")
			return nil
		}
		var err error
		if b.contributions, err = w.g.solved.Contributions(b.contributions[:0], s.FrequencyHz, s.Quantity); err != nil {
			return Faultf(Malformed, "calibration", "%w", err)
		}
		w.takeShunt(fitShunt(s, &b.terms, b.contributions, w.motional(), network.SampleNoise(w.c.Calibration, s)))
		return nil
	}
	return nil
}

// motional returns the admittance of the main mode's arm, which is no part of C0; nothing while that is not known.
func (w *workup) motional() func(frequencyHz float64) complex128 {
	if !w.nominal.sound() {
		return func(float64) complex128 { return 0 }
	}
	mode := w.nominal.est.Unit().Modes[0]
	return mode.Admittance
}

// fitShunt fits Y = G0 + j w C0 + Y1 to raw samples by Gauss-Newton steps with the derivatives of the bilinear samples, which end where they began for
// samples that are admittances and after two or three steps for others.
func fitShunt(s *sweep.Sweep, t *network.Terms, contributions []network.Contribution, motional func(float64) complex128, noise float64) shuntFit {
	n := s.Points()
	f := shuntFit{noise: noise}
	// The unknowns are scaled by the middle frequency, so that both are conductances.
	low, high := s.SpanHz()
	scale := math.Pi * (low + high)
	var step [2]float64
	var normal [3]float64 // of the two unknowns: GG, GB, BB
	rest := make([]complex128, n)
	slope := make([]complex128, n)
	admittance := func(i int) complex128 {
		hz := s.FrequencyHz[i]
		return complex(f.siemens, 2*math.Pi*hz*f.farad) + motional(hz)
	}
	for range 8 {
		normal, step = [3]float64{}, [2]float64{}
		for i := range n {
			y := admittance(i)
			divisor := 1 + t.C[i]*y
			slope[i] = (t.B[i] - t.A[i]*t.C[i]) / (divisor * divisor)
			rest[i] = complex(s.Re[i], s.Im[i]) - t.Sample(i, y)
		}
		normal, step = solveShunt(s, slope, rest, scale)
		f.siemens += step[0]
		f.farad += step[1] / scale
		if math.Abs(step[0])+math.Abs(step[1]) <= 1e-12*scale*math.Abs(f.farad) {
			break
		}
	}
	var sum float64
	for i := range n {
		r := complex(s.Re[i], s.Im[i]) - t.Sample(i, admittance(i))
		sum += real(r)*real(r) + imag(r)*imag(r)
	}
	f.residual = math.Sqrt(sum / float64(max(1, n-1)))
	f.share = f.residual / cmplx.Abs(slope[n/2]*complex(0, scale*f.farad))
	perPart := math.Max(f.residual, noise) * math.Max(f.residual, noise) / 2
	determinant := normal[0]*normal[2] - normal[1]*normal[1]
	f.variance = perPart * normal[0] / determinant / (scale * scale)
	for k := range contributions {
		c := &contributions[k]
		for i := range n {
			y := admittance(i)
			rest[i] = t.Sample(i, y) - c.Terms.Sample(i, y)
		}
		_, step = solveShunt(s, slope, rest, scale)
		q := quantity{influences: f.shifts}
		q.add(influenceKey{c.Name, c.Group}, step[1]/scale)
		f.shifts = q.influences
	}
	return f
}

// solveShunt returns the normal equations of the two unknowns and the step that they give.
func solveShunt(s *sweep.Sweep, slope, rest []complex128, scale float64) (normal [3]float64, step [2]float64) {
	var right [2]float64
	for i, k := range slope {
		a, b := k, k*complex(0, 2*math.Pi*s.FrequencyHz[i]/scale)
		normal[0] += real(a * cmplx.Conj(a))
		normal[1] += real(a * cmplx.Conj(b))
		normal[2] += real(b * cmplx.Conj(b))
		right[0] += real(cmplx.Conj(a) * rest[i])
		right[1] += real(cmplx.Conj(b) * rest[i])
	}
	determinant := normal[0]*normal[2] - normal[1]*normal[1]
	step[0] = (normal[2]*right[0] - normal[1]*right[1]) / determinant
	step[1] = (normal[0]*right[1] - normal[1]*right[0]) / determinant
	return normal, step
}

// Above this share of the response of C0, and ten times the noise, what a capacitance leaves is a mode: the sweep was not away from all of them.
const shuntMisfit = 0.01

// takeShunt keeps a fit as a quantity, unless it is none.
func (w *workup) takeShunt(f shuntFit) {
	if math.IsNaN(f.farad) || math.IsInf(f.farad, 0) || math.IsNaN(f.variance) || f.variance < 0 {
		return
	}
	if f.residual > 10*f.noise && f.share > shuntMisfit {
		w.remark("The shunt-capacitance sweep is not away from all modes: a capacitance leaves %.1f %% of its samples unexplained. It was not read.", 100*f.share)
		return
	}
	// The noise of this sweep is an estimate of its own with one parameter.
	est := &resonance.Estimate{State: resonance.Found}
	est.Value[resonance.ShuntCapacitanceFarad] = f.farad
	est.Statistical[resonance.ShuntCapacitanceFarad][resonance.ShuntCapacitanceFarad] = f.variance
	q := quantity{value: f.farad, estimates: []*resonance.Estimate{est}, gradients: make([][resonance.Parameters]float64, 1), influences: f.shifts}
	q.gradients[0][resonance.ShuntCapacitanceFarad] = 1
	v, _, ok := q.measured()
	if !ok {
		return
	}
	w.shunt, w.shuntQuantity = &v, &q
	if w.nominal.sound() {
		if apparent, ok := measure(w.nominal.est, shuntCapacitance); ok {
			w.remark("C0 away from all modes is %s (k = 2); in the window of the main mode it appears as %s.", verdict.Format(v, verdict.UnitFarad), verdict.Format(apparent, verdict.UnitFarad))
		}
	}
}
