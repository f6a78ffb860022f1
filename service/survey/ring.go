package survey

import "math"

// ring follows the free oscillation of one pole through a stepped sweep of continuous phase. A linear resonator behind a linear network has the
// response
//
//	F(f) = smooth + sum_k r_k/(f - q_k)
//
// q_k being its natural frequencies: complex, with an imaginary part of half the loaded width. Seen from a source at the frequency f the part of
// one pole obeys, for r = 1,
//
//	da/dt = lambda (a - s),    lambda = 2 pi j (q - f),    s = 1/(f - q)
//
// exactly and by itself, however many modes share the network: what couples them is in where the poles lie. a is handed over when the frequency
// changes and the phase does not, so that over a dwell T of which the last Tw are averaged
//
//	a at the end     = s + (a before - s) E        E = exp(lambda T)
//	mean over the Tw = s + (a before - s) M        M = (exp(lambda T) - exp(lambda (T - Tw)))/(lambda Tw)
//
// The resonator is at rest before the lead-in. exp(lambda T) = exp(2 pi j q T) exp(-2 pi j f T), and the second factor belongs to the sweep,
// not to the unit: it is kept in a table, and a pass costs one division and a dozen multiplications for each point and pole.
type ring struct {
	s                        *samples
	dwell, averaging, leadIn float64
	whole, wait              []complex128 // exp(-2 pi j f T) and exp(-2 pi j f (T - Tw)) at each point, f from the reference
}

// set gives the ring its timing, all times multiplied by a factor, and fills the tables.
func (r *ring) set(s *samples, factor float64) {
	dwell, averaging := s.dwell*factor, s.averaging*factor
	r.s, r.leadIn = s, s.leadIn*factor
	r.dwell, r.averaging = dwell, averaging
	r.whole, r.wait = grown(r.whole, s.n), grown(r.wait, s.n)
	before := dwell - averaging
	for i, f := range s.offsetHz {
		r.whole[i] = turn(-2 * math.Pi * f * dwell)
		switch {
		case before <= 0:
			r.wait[i] = 1
		default:
			r.wait[i] = turn(-2 * math.Pi * f * before)
		}
	}
}

// turn returns exp(j angle).
func turn(angle float64) complex128 {
	sin, cos := math.Sincos(angle)
	return complex(cos, sin)
}

// expOf returns exp(z).
func expOf(z complex128) complex128 {
	return complex(math.Exp(real(z)), 0) * turn(imag(z))
}

// free is what a pole of unit residue adds to its steady response at each point, and the derivatives of that by q and by the logarithm of a
// factor on all times.
type free struct{ value, byPole, byStretch []complex128 }

// resize gives the slices the length n.
func (f *free) resize(n int) {
	f.value, f.byPole, f.byStretch = grown(f.value, n), grown(f.byPole, n), grown(f.byStretch, n)
}

// run fills dst for the points from up to to; index 0 of dst belongs to point from. If from is not the first point, the resonator is taken to be
// settled there. Derivatives are left out where they are not asked for.
func (r *ring) run(q complex128, from, to int, dst *free, derivative, stretch bool) {
	const j2pi = complex(0, 2*math.Pi)
	grownWhole, grownWait := expOf(j2pi*q*complex(r.dwell, 0)), expOf(j2pi*q*complex(r.dwell-r.averaging, 0))
	dwell, wait, window := complex(r.dwell, 0), complex(r.dwell-r.averaging, 0), complex(r.averaging, 0)
	inverseWindow := 1 / r.averaging
	s := reciprocal(complex(r.s.offsetHz[from], 0) - q)
	state, byPole, byStretch := s, s*s, complex128(0)
	if from == 0 {
		lambda := j2pi * (q - complex(r.s.offsetHz[0], 0))
		lead := complex(r.leadIn, 0)
		left := expOf(lambda * lead)
		state = s * (1 - left)
		byPole = s*s*(1-left) - s*left*lead*j2pi
		byStretch = -s * left * lambda * lead
	}
	for n := from; n < to; n++ {
		lambda := j2pi * (q - complex(r.s.offsetHz[n], 0))
		inverse := reciprocal(lambda)
		s := inverse * -j2pi // 1/(f - q)
		e, w := grownWhole*r.whole[n], grownWait*r.wait[n]
		z := lambda * window
		var mean, slope complex128 // M and dM/dlambda
		if square(z) > 4e-4 {
			over := inverse * complex(inverseWindow, 0)
			mean = (e - w) * over
			slope = (dwell*e-wait*w)*over - mean*inverse
		} else {
			// (exp(z) - 1)/z and its derivative by their power series, good to 1e-15 here
			phi := 1 + z*(1.0/2+z*(1.0/6+z*(1.0/24+z*(1.0/120+z*(1.0/720)))))
			mean = w * phi
			slope = wait*mean + w*window*(1.0/2+z*(1.0/3+z*(1.0/8+z*(1.0/30+z*(1.0/144+z*(1.0/840))))))
		}
		x := state - s
		dst.value[n-from] = x * mean
		state = s + x*e
		if !derivative {
			continue
		}
		y := byPole - s*s
		dst.byPole[n-from] = y*mean + x*slope*j2pi
		byPole = s*s + y*e + x*dwell*e*j2pi
		if stretch {
			dst.byStretch[n-from] = byStretch*mean + x*slope*lambda
			byStretch = byStretch*e + x*dwell*e*lambda
		}
	}
}
