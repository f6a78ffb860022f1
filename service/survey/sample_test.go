package survey

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
	"time"

	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
)

// truth is a unit of the tests, its response written out with complex numbers and nothing of the package's model.
type truth struct {
	modes  []branch
	c0, g0 float64
}

type branch struct{ fs, r, l float64 }

func (b branch) impedance(f float64) complex128 {
	return complex(b.r, 2*math.Pi*b.l*(f-b.fs)*(f+b.fs)/f)
}

func (u truth) admittance(f float64) complex128 {
	y := complex(u.g0, 2*math.Pi*f*u.c0)
	for _, b := range u.modes {
		y += 1 / b.impedance(f)
	}
	return y
}

// fixture holds terms that do not depend on frequency.
type fixture struct {
	name    string
	a, b, c complex128
	d       float64
	q       sweep.Quantity
}

func (n fixture) sample(y complex128) complex128 { return (n.a + n.b*y) / (complex(n.d, 0) + n.c*y) }

func (n fixture) terms(f []float64) *network.Terms {
	t := &network.Terms{D: n.d, FrequencyHz: f}
	for range f {
		t.A, t.B, t.C = append(t.A, n.a), append(t.B, n.b), append(t.C, n.c)
	}
	return t
}

var (
	piNetwork     = fixture{"pi-network", 0, 0.0332844 * 25, 25, 1, sweep.S21}
	skewNetwork   = fixture{"skew pi-network", 1e-4 - 2e-4i, (0.8 - 0.3i), 24.6 + 1.8i, 1, sweep.S21}
	seriesThrough = fixture{"series-through", 0, 100, 100, 1, sweep.S21}
	reflection    = fixture{"reflection", 1, -50, 50, 1, sweep.S11}
	admittances   = fixture{"admittance", 0, 1, 0, 1, sweep.Admittance}
	impedances    = fixture{"impedance", 1, 0, 1, 0, sweep.Impedance}
)

// tenMegahertz is a 10 MHz fundamental unit of 10 ohm, 20 fF, 5 pF.
func tenMegahertz() truth {
	return truth{modes: []branch{{10e6, 10, 1 / (4e14 * math.Pi * math.Pi * 20e-15)}}, c0: 5e-12}
}

// width returns the loaded half-power width of a mode in a resistive fixture, C0 left out.
func (b branch) width(n fixture) float64 {
	r := b.r
	if n.d != 0 {
		r += real(n.c)
	}
	return r / (2 * math.Pi * b.l)
}

// unwanted returns a branch suppressed by so many decibels in a pi-network, with the given loaded width in the fixture.
func unwanted(main branch, n fixture, fs, decibel, width float64) branch {
	r := (main.r+25)*math.Pow(10, decibel/20) - 25
	return branch{fs, r, (r + real(n.c)) / (2 * math.Pi * width)}
}

// peak returns the length of the sample at the first mode's resonance, less that of the unit without its arms.
func (u truth) peak(n fixture) float64 {
	f := u.modes[0].fs
	return cmplx.Abs(n.sample(u.admittance(f)) - n.sample(complex(u.g0, 2*math.Pi*f*u.c0)))
}

// grid returns n frequencies from low to high.
func grid(low, high float64, n int) []float64 {
	f := make([]float64, n)
	for i := range f {
		f[i] = low + (high-low)*float64(i)/float64(n-1)
	}
	return f
}

// settled builds a request of a unit in a fixture, noise-free.
func settled(u truth, n fixture, f []float64) *Request {
	s := &sweep.Sweep{Role: sweep.Unwanted, Quantity: n.q, FrequencyHz: f, Re: make([]float64, len(f)), Im: make([]float64, len(f))}
	for i := range f {
		v := n.sample(u.admittance(f[i]))
		s.Re[i], s.Im[i] = real(v), imag(v)
	}
	return &Request{Sweep: s, Terms: n.terms(f)}
}

// ringing builds a request of a stepped sweep of continuous phase that does not wait for the unit to settle. Nothing is taken to vary slowly: the
// state is the voltage u on C0 and for each mode its current i and w = vC/(w0 L),
//
//	L di/dt = u - R i - w0 L w,    dw/dt = w0 i,    C0 du/dt = (V - u)/C - G0 u - sum i
//
// and is carried over each step in the frame of the source, V = exp(jwt), by the matrix exponential. A sample is A + k times the mean current
// from the source.
func ringing(u truth, n fixture, f []float64, dwell, averaging float64) *Request {
	req := settled(u, n, f)
	size := 2*len(u.modes) + 1
	system := make([][]complex128, size)
	for a := range system {
		system[a] = make([]complex128, size)
	}
	last := size - 1
	for k, b := range u.modes {
		w := 2 * math.Pi * b.fs
		i, c := 2*k, 2*k+1
		system[i][i], system[i][c], system[i][last] = complex(-b.r/b.l, 0), complex(-w, 0), complex(1/b.l, 0)
		system[c][i] = complex(w, 0)
		system[last][i] = complex(-1/u.c0, 0)
	}
	system[last][last] = -(1/n.c + complex(u.g0, 0)) / complex(u.c0, 0)
	drive := 1 / (n.c * complex(u.c0, 0)) // of u by V
	beforeBy, windowBy := exponential(system, dwell-averaging), exponential(system, averaging)
	state := make([]complex128, size)
	for p := range f {
		w := 2 * math.Pi * f[p]
		frame := make([][]complex128, size)
		for a := range frame {
			frame[a] = append([]complex128(nil), system[a]...)
			frame[a][a] -= complex(0, w)
		}
		input := make([]complex128, size)
		input[last] = -drive
		steady := solveDense(frame, input)
		away := make([]complex128, size)
		for a := range away {
			away[a] = state[a] - steady[a]
		}
		before := times(beforeBy, away)
		end := times(windowBy, before)
		turnBefore, turnWindow := cmplx.Rect(1, -math.Mod(w*(dwell-averaging), 2*math.Pi)), cmplx.Rect(1, -math.Mod(w*averaging, 2*math.Pi))
		difference := make([]complex128, size)
		for a := range end {
			before[a] *= turnBefore
			end[a] *= turnBefore * turnWindow
			difference[a] = (end[a] - before[a]) / complex(averaging, 0)
			state[a] = steady[a] + end[a]
		}
		mean := solveDense(frame, difference)
		current := (1 - steady[last] - mean[last]) / n.c // (V - u)/C
		v := n.a + (n.b-n.a*n.c)*current
		req.Sweep.Re[p], req.Sweep.Im[p] = real(v), imag(v)
	}
	req.Sweep.Timing = sweep.Timing{
		Dwell: time.Duration(math.Round(dwell * 1e9)), Averaging: time.Duration(math.Round(averaging * 1e9)), Phase: sweep.PhaseContinuous,
	}
	return req
}

// exponential returns exp(m t) by scaling and squaring.
func exponential(m [][]complex128, t float64) [][]complex128 {
	k := len(m)
	norm := 0.0
	for _, row := range m {
		for _, v := range row {
			norm = math.Max(norm, cmplx.Abs(v)*t)
		}
	}
	halvings := 0
	for norm > 0.01 {
		norm /= 2
		halvings++
	}
	step := complex(t/math.Pow(2, float64(halvings)), 0)
	sum, term := identity(k), identity(k)
	for j := 1; j <= 8; j++ {
		term = multiplied(term, m)
		for a := range term {
			for b := range term[a] {
				term[a][b] *= step / complex(float64(j), 0)
				sum[a][b] += term[a][b]
			}
		}
	}
	for range halvings {
		sum = multiplied(sum, sum)
	}
	return sum
}

func identity(k int) [][]complex128 {
	m := make([][]complex128, k)
	for a := range m {
		m[a] = make([]complex128, k)
		m[a][a] = 1
	}
	return m
}

func multiplied(a, b [][]complex128) [][]complex128 {
	k := len(a)
	out := make([][]complex128, k)
	for i := range out {
		out[i] = make([]complex128, k)
		for j := range k {
			for l := range k {
				out[i][j] += a[i][l] * b[l][j]
			}
		}
	}
	return out
}

func times(a [][]complex128, v []complex128) []complex128 {
	out := make([]complex128, len(v))
	for i := range a {
		for j := range v {
			out[i] += a[i][j] * v[j]
		}
	}
	return out
}

// solveDense returns x with m x = v by Gauss-Jordan elimination.
func solveDense(m [][]complex128, v []complex128) []complex128 {
	k := len(v)
	a := make([][]complex128, k)
	for i := range a {
		a[i] = append(append([]complex128(nil), m[i]...), v[i])
	}
	for c := range k {
		best := c
		for i := c; i < k; i++ {
			if cmplx.Abs(a[i][c]) > cmplx.Abs(a[best][c]) {
				best = i
			}
		}
		a[c], a[best] = a[best], a[c]
		for i := range a {
			if i != c {
				factor := a[i][c] / a[c][c]
				for j := c; j <= k; j++ {
					a[i][j] -= factor * a[c][j]
				}
			}
		}
	}
	x := make([]complex128, k)
	for i := range x {
		x[i] = a[i][k] / a[i][i]
	}
	return x
}

// noisy returns a copy of the request with complex normal noise of the given rms length added, and told so.
func noisy(req *Request, rms float64, rng *rand.Rand) *Request {
	s := *req.Sweep
	s.Re, s.Im = append([]float64(nil), s.Re...), append([]float64(nil), s.Im...)
	for i := range s.Re {
		s.Re[i] += rms / math.Sqrt2 * rng.NormFloat64()
		s.Im[i] += rms / math.Sqrt2 * rng.NormFloat64()
	}
	out := *req
	out.Sweep = &s
	out.NoiseRMS = rms
	return &out
}

func decibels(db float64) float64 { return math.Pow(10, db/20) }

// random returns a generator whose seed is printed when the test fails.
func random(t testing.TB) *rand.Rand {
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	return rand.New(rand.NewPCG(seed, 1))
}
