package resonance

import (
	"math"
	"math/cmplx"
)

// pole is one resonance in the plane of points, over a constant background:
//
//	F = background + residue/(f - centre - j half)
//
// Frequencies in hertz from points.referenceHz; half is half the loaded half-power width and positive. A one-port in any linear network is of
// this form near its resonance, whatever the network does to the circle: only the six numbers differ.
type pole struct {
	centreHz, halfHz    float64
	residue, background complex128
}

// plane is what pole fits work on: points.re/im and points.scale, except where the samples are impedances. There the resonance is a zero and
// not a pole of the sample, so the plane is the admittance, with the weights that noise in the impedance leaves it.
type plane struct {
	offsetHz, re, im, weight []float64
	ordered                  bool // offsets ascend or descend throughout
}

func (f *Fitter) preparePlane() {
	p, q := &f.points, &f.plane
	q.offsetHz, q.re, q.im, q.weight = p.offsetHz, p.re, p.im, p.scale
	if p.impedance {
		n := p.n
		f.inverted = grown(f.inverted, 3*n)
		re, im, weight := f.inverted[:n], f.inverted[n:2*n], f.inverted[2*n:]
		for i := range n {
			square := p.re[i]*p.re[i] + p.im[i]*p.im[i]
			re[i], im[i], weight[i] = p.re[i]/square, -p.im[i]/square, p.scale[i]*square
		}
		q.re, q.im, q.weight = re, im, weight
	}
	rising, falling := true, true
	for i := 1; i < p.n; i++ {
		rising = rising && p.offsetHz[i] >= p.offsetHz[i-1]
		falling = falling && p.offsetHz[i] <= p.offsetHz[i-1]
	}
	q.ordered = rising || falling
}

// fit returns the pole that describes the plane best, by linear least squares on
//
//	(x - xp) F = background x + b
//
// repeated with the weight 1/|x - xp| of the last pole, so that what is minimised becomes the distance of the samples themselves. Like a
// circle fit it takes any rotated or displaced circle; unlike one it uses the frequencies, is as good on a short arc, and needs
// no phases to be unwrapped. It is a start, not an estimate: noise enters the factor of F. false if there is no pole.
//
// Sources: E. C. Levy, Complex-curve fitting, IRE Trans. Automatic Control 4 (1959) 37; C. K. Sanathanan and J. Koerner, Transfer function
// synthesis as a ratio of two complex polynomials, IEEE Trans. Automatic Control 8 (1963) 56.
func (q *plane) fit() (pole, bool) {
	low, high := math.Inf(1), math.Inf(-1)
	var meanRe, meanIm float64
	for i, d := range q.offsetHz {
		low, high = math.Min(low, d), math.Max(high, d)
		meanRe += q.re[i]
		meanIm += q.im[i]
	}
	n := float64(len(q.offsetHz))
	meanRe, meanIm = meanRe/n, meanIm/n
	middle, half := (low+high)/2, (high-low)/2
	var at complex128 // the pole, in half spans from the middle
	var background, residue complex128
	const passes = 4
	for pass := range passes {
		var s, sx, sxx, svr, svi, sxvr, sxvi, sxxvr, sxxvi, svv, sxvv float64
		for i, d := range q.offsetHz {
			x := (d - middle) / half
			w := q.weight[i]
			w *= w
			if pass > 0 {
				u := x - real(at)
				w /= u*u + imag(at)*imag(at)
			}
			vr, vi := q.re[i]-meanRe, q.im[i]-meanIm
			wx := w * x
			wxx := wx * x
			square := vr*vr + vi*vi
			s += w
			sx += wx
			sxx += wxx
			svr += w * vr
			svi += w * vi
			sxvr += wx * vr
			sxvi += wx * vi
			sxxvr += wxx * vr
			sxxvi += wxx * vi
			svv += w * square
			sxvv += wx * square
		}
		sv, sxv, sxxv := complex(svr, svi), complex(sxvr, sxvi), complex(sxxvr, sxxvi)
		solution, ok := solveThree([3][4]complex128{
			{complex(svv, 0), cmplx.Conj(sxv), cmplx.Conj(sv), complex(sxvv, 0)},
			{sxv, complex(sxx, 0), complex(sx, 0), sxxv},
			{sv, complex(sx, 0), complex(s, 0), sxv},
		})
		if !ok {
			return pole{}, false
		}
		at, background = solution[0], solution[1]
		residue = solution[2] + background*at
		if imag(at) < 0 {
			// Noise can put the pole on the wrong side; its mirror image is the better guess for the next weights.
			at = cmplx.Conj(at)
			if pass == passes-1 {
				return pole{}, false
			}
		}
		if imag(at) == 0 {
			return pole{}, false
		}
	}
	scale := complex(half, 0)
	return pole{
		centreHz: middle + half*real(at), halfHz: half * imag(at),
		residue: residue * scale, background: background + complex(meanRe, meanIm),
	}, true
}

// onePole says that the plane is that of one resonance in some linear network, known or not: the pole that fits it leaves little.
func (q *plane) onePole() bool {
	p, ok := q.fit()
	if !ok {
		return false
	}
	var left, height float64
	for i, d := range q.offsetHz {
		response := p.residue / complex(d-p.centreHz, -p.halfHz)
		away := complex(q.re[i], q.im[i]) - p.background - response
		w := q.weight[i] * q.weight[i]
		left += w * (real(away)*real(away) + imag(away)*imag(away))
		height = math.Max(height, w*(real(response)*real(response)+imag(response)*imag(response)))
	}
	return left <= misfitShare*misfitShare*height*float64(len(q.offsetHz))
}

// solveThree solves three complex linear equations, the right side being the fourth column. false if they are singular to working precision.
func solveThree(a [3][4]complex128) (x [3]complex128, ok bool) {
	for k := range 3 {
		best := k
		for i := k + 1; i < 3; i++ {
			if cmplx.Abs(a[i][k]) > cmplx.Abs(a[best][k]) {
				best = i
			}
		}
		a[k], a[best] = a[best], a[k]
		if size := cmplx.Abs(a[k][k]); !(size > 0) || math.IsInf(size, 0) {
			return x, false
		}
		for i := k + 1; i < 3; i++ {
			factor := a[i][k] / a[k][k]
			for j := k; j < 4; j++ {
				a[i][j] -= factor * a[k][j]
			}
		}
	}
	for k := 2; k >= 0; k-- {
		sum := a[k][3]
		for j := k + 1; j < 3; j++ {
			sum -= a[k][j] * x[j]
		}
		x[k] = sum / a[k][k]
		if cmplx.IsNaN(x[k]) || cmplx.IsInf(x[k]) {
			return x, false
		}
	}
	return x, true
}

// start returns the circuit that has the pole, as start values of the fit.
//
// With D = 1 the unit meets the impedance Zp = C/(1 + C y0), y0 = G0 + j w C0 being its own parallel admittance, and
//
//	F = y0/(1 + C y0) + (1 + C y0)^-2/(R1 + Zp + jX),   X near 4 pi L1 (f - fs)
//
// so the background gives y0, the residue L1, the width R1 and the centre fs. Noise can leave R1 negative; then it starts at a small
// part of the loaded resistance.
func (m *forward) start(q pole, out []float64) {
	p := m.points
	clear(out)
	source := complex128(0)
	if !p.impedance {
		source = p.sourceAt(q.centreHz)
	}
	admittance := q.background / (1 - source*q.background)
	spread := 1 + source*admittance
	seen := source / spread
	const least = 0.02
	l1 := cmplx.Abs(1/(spread*spread*q.residue)) / (4 * math.Pi)
	loaded := 4 * math.Pi * l1 * q.halfHz
	r1 := math.Max(loaded-real(seen), least*loaded)
	frequency := p.referenceHz + q.centreHz
	out[ResonanceHz] = q.centreHz + imag(seen)/(4*math.Pi*l1)
	out[LogResistance] = math.Log(r1)
	out[LogInductance] = math.Log(l1)
	out[ShuntCapacitanceFarad] = imag(admittance) / (2 * math.Pi * frequency)
}
