package survey

import (
	"math"
	"math/cmplx"

	"example.com/admit/service/resonance"
)

// NeighbourInfluence is the name of the influence of a main mode beyond the sweep that is known from a main sweep only.
const NeighbourInfluence = "main_mode"

// partVariance returns the variance of one part of a raw sample: from the instrument where it is known and the residual agrees with it, else from
// the residual, sum |r|^2/(2N - p). Residuals that hang together carry fewer observations than there are points: the variance is multiplied
// by the sum of their correlations at all lags, the factor for a mean of correlated readings.
func (v *Surveyor) partVariance(q *Quality) float64 {
	freedom := math.Max(float64(2*(v.samples.n-v.wild)-len(v.now.params)), 1)
	variance := v.now.sum / freedom
	q.NoiseRMS = math.Sqrt(2 * variance)
	if noise := v.request.NoiseRMS; noise > 0 {
		known := noise * noise / 2
		q.ReducedChiSquare = variance / known
		if math.Abs(variance/known-1) < 4*math.Sqrt(2/freedom) {
			variance = known
		}
	}
	return variance * correlations(v.residual)
}

// correlation returns the correlation of complex residuals, given as pairs, at a lag.
func correlation(pairs []float64, lag int) float64 {
	sum := product(pairs, pairs)
	if !(sum > 0) {
		return 0
	}
	return product(pairs[2*lag:], pairs) / sum
}

// product returns a b over the length of a, in four sums that do not wait for each other.
func product(a, b []float64) float64 {
	b = b[:len(a)]
	var s0, s1, s2, s3 float64
	i := 0
	for ; i+3 < len(a); i += 4 {
		s0 += a[i] * b[i]
		s1 += a[i+1] * b[i+1]
		s2 += a[i+2] * b[i+2]
		s3 += a[i+3] * b[i+3]
	}
	for ; i < len(a); i++ {
		s0 += a[i] * b[i]
	}
	return s0 + s1 + (s2 + s3)
}

// significant is the lag-1 correlation that white noise of n complex points stays below: four of its standard deviations.
func significant(n int) float64 { return 4 / math.Sqrt(2*float64(n)) }

// correlations returns 1 + 2 (rho1 + rho2 + ...), until they no longer rise above their scatter; 1 for white noise. It is how many residuals
// carry together what one of white noise would.
func correlations(pairs []float64) float64 {
	const longest = 50
	n := len(pairs) / 2
	rho := correlation(pairs, 1)
	if rho < significant(n) {
		return 1
	}
	energy := product(pairs, pairs)
	scatter := 1 / math.Sqrt(2*float64(n))
	sum := 1.0
	for lag := 1; lag <= longest && lag < n/4; lag++ {
		if lag > 1 {
			rho = product(pairs[2*lag:], pairs) / energy
		}
		if rho < 2*scatter {
			break
		}
		sum += 2 * rho
	}
	return sum
}

// systematic fills the share of each named influence: the step that the joint fit would take if the terms were off by one standard uncertainty,
//
//	shift = -(J'J)^-1 J' (T_changed(Y_fit) - T(Y_fit))
//
// for the fitted unit, in the linearised fit. The reference clock moves all frequencies alike.
func (v *Surveyor) systematic(out *Result) {
	s := &v.samples
	old := out.Systematic
	out.Systematic = old[:0]
	shift := func(name, group string) []float64 {
		k := len(out.Systematic)
		if k < cap(out.Systematic) {
			out.Systematic = out.Systematic[:k+1]
		} else {
			out.Systematic = append(out.Systematic, Contribution{})
		}
		c := &out.Systematic[k]
		c.Name, c.Group = name, group
		c.Shift = grown(c.Shift, len(out.Value))
		clear(c.Shift)
		return c.Shift
	}
	respond := func(dst []float64) {
		response := grown(v.scratch, len(v.now.params))
		v.joint.Response(response, v.shift[:2*s.n])
		v.mapping.vector(dst, response)
	}
	v.shift = grown(v.shift, 2*s.n)
	if !s.unknown {
		if len(v.request.Contributions) > 0 {
			v.prepareCircuit()
		}
		for i := range v.request.Contributions {
			c := &v.request.Contributions[i]
			if len(c.Terms.A) != s.n || len(c.Terms.B) != s.n || len(c.Terms.C) != s.n {
				continue
			}
			v.changed(c.Terms.A, c.Terms.B, c.Terms.C, complex(c.Terms.D, 0))
			respond(shift(c.Name, c.Group))
		}
		if v.model.neighbour != nil {
			v.neighbourInfluence(func(group string) { respond(shift(NeighbourInfluence, group)) })
		}
	}
	if u := v.request.ClockUncertainty; u > 0 {
		dst := shift(resonance.ClockInfluence, "")
		for i := range out.Modes {
			row := out.Index(i, ResonanceHz)
			dst[row] = u * out.Value[row]
		}
	}
}

// neighbourInfluence moves each parameter of the known neighbour by its standard uncertainty.
func (v *Surveyor) neighbourInfluence(respond func(group string)) {
	main, m := v.request.Main, &v.model
	was := *m.neighbour
	covariance := main.Covariance()
	for _, p := range [...]struct {
		group string
		of    resonance.Parameter
	}{{"resonance", resonance.ResonanceHz}, {"resistance", resonance.LogResistance}, {"inductance", resonance.LogInductance}} {
		u := math.Sqrt(covariance[p.of][p.of])
		moved := was
		switch p.of {
		case resonance.ResonanceHz:
			moved.offsetHz += u
		case resonance.LogResistance:
			moved.resistance *= math.Exp(u)
		default:
			moved.inductance *= math.Exp(u)
		}
		*m.neighbour = moved
		m.Evaluate(v.now.params, v.shift[:2*v.samples.n], nil)
		for i, r := range v.residual {
			v.shift[i] -= r
		}
		respond(p.group)
	}
	*m.neighbour = was
	m.Evaluate(v.now.params, v.residual, nil)
}

// prepareCircuit stores at each point what the model has the unit do, as z and p with Y = p/z, and the direction by which a change of the raw
// sample becomes one of the residual. A resonator that rings has not the admittance of its steady state, but the one that the model's
// sample stands for.
func (v *Surveyor) prepareCircuit() {
	s, m := &v.samples, &v.model
	v.circuit = grown(v.circuit, 3*s.n)
	turned := turn(-m.value(v.now.params, freePhase))
	t := v.request.Terms
	for i := range s.n {
		c := v.circuit[3*i : 3*i+3]
		if s.scale[i] == 0 {
			c[0], c[1], c[2] = 1, 0, 0
			continue
		}
		residual := complex(v.residual[2*i]/s.scale[i], v.residual[2*i+1]/s.scale[i])
		if s.impedance {
			y := s.value[i] + residual
			k := t.A[i] / t.C[i]
			c[0], c[1], c[2] = 1, y, -cmplx.Conj(k)*y*y/complex(length(k)*square(y), 0)
			continue
		}
		f := s.raw[i]*turned - s.open[i] + residual
		c[0], c[1], c[2] = 1-s.source[i]*f, f, cmplx.Conj(t.B[i]-t.A[i]*t.C[i])*complex(1/s.scale[i], 0)
	}
}

// changed writes into shift by how much the residuals change when the terms become those given.
func (v *Surveyor) changed(a, b, c []complex128, d complex128) {
	t := v.request.Terms
	d0 := complex(t.D, 0)
	for i := range v.samples.n {
		q := v.circuit[3*i : 3*i+3]
		z, p := q[0], q[1]
		// T' - T over one denominator, so that two nearly equal samples are not subtracted.
		above, below := t.A[i]*z+t.B[i]*p, d0*z+t.C[i]*p
		above2, below2 := a[i]*z+b[i]*p, d*z+c[i]*p
		difference := (above2*below - above*below2) * q[2] * reciprocal(below*below2)
		v.shift[2*i], v.shift[2*i+1] = real(difference), imag(difference)
	}
}
