package resonance

import (
	"math"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
)

// truth is a unit of the tests: plain numbers, with its response written out with complex numbers and nothing of the package's model.
type truth struct {
	fs, r1, l1, c0, g0 float64
}

func (u truth) admittance(f float64) complex128 {
	z := complex(u.r1, 2*math.Pi*u.l1*(f-u.fs)*(f+u.fs)/f)
	return 1/z + complex(u.g0, 2*math.Pi*f*u.c0)
}

// c1 returns the motional capacitance.
func (u truth) c1() float64 { return 1 / (4 * math.Pi * math.Pi * u.fs * u.fs * u.l1) }

// fixture holds terms that do not depend on frequency.
type fixture struct {
	name    string
	a, b, c complex128
	d       float64
	q       sweep.Quantity
}

func (n fixture) sample(y complex128) complex128 {
	return (n.a + n.b*y) / (complex(n.d, 0) + n.c*y)
}

func (n fixture) terms(points int) *network.Terms {
	t := &network.Terms{D: n.d}
	for range points {
		t.A, t.B, t.C = append(t.A, n.a), append(t.B, n.b), append(t.C, n.c)
	}
	return t
}

var (
	piNetwork     = fixture{"pi-network", 0, 0.0332844 * 25, 25, 1, sweep.S21}
	seriesThrough = fixture{"series-through", 0, 100, 100, 1, sweep.S21}
	reflection    = fixture{"reflection", 1, -50, 50, 1, sweep.S11}
	highImpedance = fixture{"high-impedance", 0, 25, 20000, 1, sweep.S21}
	admittances   = fixture{"admittance", 0, 1, 0, 1, sweep.Admittance}
	impedances    = fixture{"impedance", 1, 0, 1, 0, sweep.Impedance}
)

// part is one unit of the invented plant in the network it is made for.
type part struct {
	name string
	unit truth
	in   fixture
}

func unitOf(fs, r1, c1, c0 float64) truth {
	w := 2 * math.Pi * fs
	return truth{fs: fs, r1: r1, l1: 1 / (w * w * c1), c0: c0}
}

// parts are the five part types of the invented plant; fs of load-specified parts lies below the nominal frequency.
func parts() []part {
	load := func(nominal, c1, c0, cl float64) float64 { return nominal / math.Sqrt(1+c1/(c0+cl)) }
	return []part{
		{"TM-32K768-F7", unitOf(load(32768, 3.4e-15, 1.3e-12, 7e-12), 38e3, 3.4e-15, 1.3e-12), highImpedance},
		{"TM-12M288-F16", unitOf(load(12.288e6, 11e-15, 3.1e-12, 16e-12), 14, 11e-15, 3.1e-12), piNetwork},
		{"TM-25M000-F10", unitOf(load(25e6, 5.5e-15, 1.6e-12, 10e-12), 18, 5.5e-15, 1.6e-12), piNetwork},
		{"TM-50M000-T3", unitOf(50e6, 32, 1.1e-15, 3.4e-12), piNetwork},
		{"TM-100M000-T5", unitOf(100e6, 48, 0.45e-15, 3.6e-12), seriesThrough},
	}
}

// bandwidth returns the loaded half-power bandwidth in the test's own words: (R1 + Re(C/(1+C y0)))/(2 pi L1).
func (u truth) bandwidth(n fixture) float64 {
	if n.d == 0 {
		return u.r1 / (2 * math.Pi * u.l1)
	}
	y0 := complex(u.g0, 2*math.Pi*u.fs*u.c0)
	return (u.r1 + real(n.c/(1+n.c*y0))) / (2 * math.Pi * u.l1)
}

// grid returns n frequencies over +-half around a middle.
func grid(middle, half float64, n int) []float64 {
	f := make([]float64, n)
	for i := range f {
		f[i] = middle - half + 2*half*float64(i)/float64(n-1)
	}
	return f
}

// measured builds a request of a unit in a fixture, noise-free.
func measured(u truth, n fixture, f []float64) *Request {
	s := &sweep.Sweep{Role: sweep.Main, Quantity: n.q, FrequencyHz: f, Re: make([]float64, len(f)), Im: make([]float64, len(f))}
	for i := range f {
		v := n.sample(u.admittance(f[i]))
		s.Re[i], s.Im[i] = real(v), imag(v)
	}
	return &Request{Sweep: s, Terms: n.terms(len(f))}
}

// noisy returns a copy of the request with complex normal noise of the given rms length added.
func noisy(req *Request, rms float64, rng *rand.Rand) *Request {
	s := *req.Sweep
	s.Re, s.Im = append([]float64(nil), s.Re...), append([]float64(nil), s.Im...)
	for i := range s.Re {
		s.Re[i] += rms / math.Sqrt2 * rng.NormFloat64()
		s.Im[i] += rms / math.Sqrt2 * rng.NormFloat64()
	}
	out := *req
	out.Sweep = &s
	return &out
}

// peak returns the length of the sample at fs, less that of the unit without its motional arm.
func (u truth) peak(n fixture) float64 {
	rest := complex(u.g0, 2*math.Pi*u.fs*u.c0)
	v := n.sample(u.admittance(u.fs)) - n.sample(rest)
	return math.Hypot(real(v), imag(v))
}

func decibels(db float64) float64 { return math.Pow(10, db/20) }

// random returns a generator whose seed is printed when the test fails.
func random(t testing.TB, seed uint64) *rand.Rand {
	t.Logf("seed %d", seed)
	return rand.New(rand.NewPCG(seed, 1))
}
