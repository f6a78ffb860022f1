package bound

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/crystal"
)

// constant is a fixture network whose terms do not depend on frequency.
func constant(p Port) func(float64) Port { return func(float64) Port { return p } }

func unitOf(fs, r1, c1, c0 float64) crystal.Unit {
	return crystal.Unit{Modes: []crystal.Mode{crystal.ModeFromCapacitance(fs, r1, c1)}, ShuntCapacitanceFarad: c0}
}

// around returns n frequencies over +-half loaded bandwidths around fs.
func around(u crystal.Unit, p Port, half float64, n int) []float64 {
	b := half * u.Modes[0].LoadedBandwidthHz(real(p.Source))
	f := make([]float64, n)
	for i := range f {
		f[i] = u.Modes[0].ResonanceHz + b*(2*float64(i)/float64(n-1)-1)
	}
	return f
}

// rmsFor returns the noise for a ratio of the response at the peak to it.
func rmsFor(u crystal.Unit, p Port, snrDecibel float64) float64 {
	y0 := u.ShuntAdmittance(u.Modes[0].ResonanceHz)
	y := y0 + complex(1/u.Modes[0].ResistanceOhm, 0)
	current := y/(1+p.Source*y) - y0/(1+p.Source*y0)
	return cmplx.Abs(p.Gain*current) * math.Pow(10, -snrDecibel/20)
}

var (
	piNetwork  = Port{Gain: 0.0332844 * 25, Source: 25}
	fork       = Port{Gain: 25, Source: 20000}
	reflection = Port{Open: 1, Gain: -100, Source: 50}
)

// TestIndependentFigures holds the bound against an independent calculation, printed with two digits.
func TestIndependentFigures(t *testing.T) {
	for _, c := range []struct {
		name, source       string
		unit               crystal.Unit
		port               Port
		ppm, r1, c1, c0, q float64 // in parts per million, then in percent
	}{
		{"10 MHz", "independent study of the fit with numpy, section 3, 60 dB", unitOf(10e6, 10, 20e-15, 5e-12), piNetwork, 0.0029, 0.044, 0.014, 0.37, 0.046},
		{"26 MHz", "the same", unitOf(26e6, 25, 4e-15, 1.2e-12), piNetwork, 0.0021, 0.025, 0.014, 0.40, 0.029},
		{"32 kHz", "the same", unitOf(32768, 40e3, 3e-15, 1e-12), piNetwork, 0.0016, 0.013, 0.014, 0.43, 0.019},
		{"100 MHz", "the same", unitOf(100e6, 45, 0.5e-15, 3e-12), piNetwork, 0.0014, 0.020, 0.014, 0.029, 0.024},
	} {
		if c.source == "" {
			t.Fatalf("%s: no source", c.name)
		}
		s := Sweep{FrequencyHz: around(c.unit, c.port, 5, 401), Port: constant(c.port), NoiseRMS: rmsFor(c.unit, c.port, 60)}
		b, err := Of(c.unit, s)
		if err != nil {
			t.Fatalf("%s: %v", c.name, err)
		}
		m := c.unit.Modes[0]
		for _, v := range []struct {
			name      string
			got, want float64
		}{
			{"fs", 1e6 * b.Deviation[ResonanceHz] / m.ResonanceHz, c.ppm}, {"R1", 100 * b.Deviation[ResistanceOhm] / m.ResistanceOhm, c.r1},
			{"C1", 100 * b.Deviation[CapacitanceFarad] / m.CapacitanceFarad(), c.c1}, {"C0", 100 * b.Deviation[ShuntFarad] / c.unit.ShuntCapacitanceFarad, c.c0},
			{"Q", 100 * b.Deviation[QualityFactor] / m.QualityFactor(), c.q},
		} {
			unit := math.Pow(10, math.Floor(math.Log10(v.want))-1)
			if math.Abs(v.got-v.want) > 0.75*unit { // rounding of the figure and of the peak that the ratio is taken to
				t.Errorf("%s: %s %.4g, want %.4g", c.name, v.name, v.got, v.want)
			}
		}
	}
}

// TestSettledModel holds the forward model against the equivalent circuit of package crystal.
func TestSettledModel(t *testing.T) {
	u := unitOf(12.288e6, 14, 11e-15, 3.1e-12)
	u.Modes = append(u.Modes, crystal.ModeFromCapacitance(12.2885e6, 60, 1e-15))
	u.ShuntConductanceSiemens = 3e-6
	s := Sweep{FrequencyHz: around(u, reflection, 5, 51), Port: constant(reflection)}
	got := make([]complex128, len(s.FrequencyHz))
	newModel(u, s).samples(nominal(u), got)
	for i, f := range s.FrequencyHz {
		y := u.Admittance(f)
		want := reflection.Open + reflection.Gain*y/(1+reflection.Source*y)
		if cmplx.Abs(got[i]-want) > 1e-12 {
			t.Errorf("at %g Hz: %v, want %v", f, got[i], want)
		}
	}
}

// TestFreeOscillation integrates the current of the motional arm through the network by Runge-Kutta: a series L, R and C driven by a source
// exp(j phi) behind a resistance, with no C0, in the time domain.
func TestFreeOscillation(t *testing.T) {
	u := unitOf(1e6, 40, 20e-15, 1e-30)
	u.Modes[0].InductanceHenry *= 0.0025 // Q about 500: little enough to integrate every cycle
	p := Port{Gain: 1, Source: 50}
	m := u.Modes[0]
	tau := m.LoadedTimeConstant(50)
	timing := &Timing{Dwell: 0.3 * tau, Averaging: 0.2 * tau, LeadIn: 0.4 * tau}
	s := Sweep{FrequencyHz: around(u, p, 1, 4), Port: constant(p), Timing: timing}
	got := make([]complex128, len(s.FrequencyHz))
	newModel(u, s).samples(nominal(u), got)

	l, r, c := m.InductanceHenry, complex(m.ResistanceOhm+50, 0), m.CapacitanceFarad()
	var current, charge complex128
	phase := 0.0
	for i, f := range s.FrequencyHz {
		wait, averaged := timing.Dwell-timing.Averaging, timing.Averaging
		if i == 0 {
			wait += timing.LeadIn
		}
		run := func(seconds float64) (mean complex128) {
			n := int(math.Ceil(seconds * f * 400))
			h := complex(seconds/float64(n), 0)
			w := 2 * math.Pi * f
			rate := func(i, q complex128, phase float64) (complex128, complex128) {
				return (cmplx.Rect(1, phase) - r*i - q/complex(c, 0)) / complex(l, 0), i
			}
			for range n {
				d := w * real(h)
				start := current * cmplx.Rect(1, -phase)
				a1, b1 := rate(current, charge, phase)
				a2, b2 := rate(current+a1*h/2, charge+b1*h/2, phase+d/2)
				a3, b3 := rate(current+a2*h/2, charge+b2*h/2, phase+d/2)
				a4, b4 := rate(current+a3*h, charge+b3*h, phase+d)
				current += (a1 + 2*a2 + 2*a3 + a4) * h / 6
				charge += (b1 + 2*b2 + 2*b3 + b4) * h / 6
				phase += d
				mean += (start + current*cmplx.Rect(1, -phase)) / complex(2*float64(n), 0)
			}
			return mean
		}
		run(wait)
		want := run(averaged)
		if away := cmplx.Abs(got[i]-want) * 90; away > 5e-5 {
			t.Errorf("point %d: %v, integrated %v: %.1e of the peak", i, got[i], want, away)
		}
	}
}

// TestLongDwell: a sweep that stays long enough at each point is settled.
func TestLongDwell(t *testing.T) {
	u := unitOf(32765, 38e3, 3.4e-15, 1.3e-12)
	s := Sweep{FrequencyHz: around(u, fork, 5, 21), Port: constant(fork), NoiseRMS: 1e-6}
	settled, err := Of(u, s)
	if err != nil {
		t.Fatal(err)
	}
	tau := u.Modes[0].LoadedTimeConstant(20000)
	s.Timing = &Timing{Dwell: 30 * tau, Averaging: tau}
	slow, err := Of(u, s)
	if err != nil {
		t.Fatal(err)
	}
	for q := range Quantities {
		if ratio := slow.Deviation[q] / settled.Deviation[q]; math.Abs(ratio-1) > 1e-9 {
			t.Errorf("quantity %d: %g times the settled bound, want 1", q, ratio)
		}
	}
}

// TestErrorsHaveTheBound: the variance of the efficient estimator is the bound, exactly for complex samples and by simulation for magnitudes.
func TestErrorsHaveTheBound(t *testing.T) {
	u := unitOf(100e6, 48, 0.45e-15, 3.6e-12)
	p := Port{Gain: 100, Source: 100}
	for _, snr := range []float64{15, 60} {
		s := Sweep{FrequencyHz: around(u, p, 5, 101), Port: constant(p), NoiseRMS: rmsFor(u, p, snr)}
		b, err := Of(u, s, Phase)
		if err != nil {
			t.Fatal(err)
		}
		for q, row := range b.rows {
			var sum float64
			for _, v := range row {
				sum += v * v
			}
			if ratio := math.Sqrt(2*sum) / s.NoiseRMS / b.Deviation[q]; math.Abs(ratio-1) > 1e-9 {
				t.Errorf("%g dB, quantity %d: deviation %g times the bound", snr, q, ratio)
			}
		}
		s.MagnitudeOnly = true
		if b, err = Of(u, s); err != nil {
			t.Fatal(err)
		}
		const trials = 4000
		rng := rand.New(rand.NewPCG(4, 2))
		var mean, square [Quantities]float64
		noise := make([]complex128, len(s.FrequencyHz))
		for range trials {
			for i := range noise {
				noise[i] = complex(rng.NormFloat64(), rng.NormFloat64()) * complex(s.NoiseRMS/math.Sqrt2, 0)
			}
			for q, e := range b.Errors(noise) {
				e /= b.Deviation[q]
				mean[q] += e / trials
				square[q] += e * e / trials
			}
		}
		for q := range mean {
			if math.Abs(mean[q]) > 5/math.Sqrt(trials) || math.Abs(math.Sqrt(square[q])-1) > 5/math.Sqrt(2*trials) {
				t.Errorf("magnitudes, %g dB, quantity %d: mean %+.3f, deviation %.3f of the bound", snr, q, mean[q], math.Sqrt(square[q]))
			}
		}
	}
}

// TestShiftIsTheDerivative: a sample that comes from a unit moved a little shifts the estimate by that.
func TestShiftIsTheDerivative(t *testing.T) {
	u := unitOf(25e6, 18, 5.5e-15, 1.6e-12)
	s := Sweep{FrequencyHz: around(u, piNetwork, 5, 51), Port: constant(piNetwork), NoiseRMS: 1e-6}
	b, err := Of(u, s)
	if err != nil {
		t.Fatal(err)
	}
	moved := u
	moved.Modes = []crystal.Mode{u.Modes[0]}
	moved.Modes[0].ResonanceHz += 0.01
	moved.Modes[0].ResistanceOhm *= 1.0001
	moved.ShuntCapacitanceFarad *= 1.0002
	other, err := Of(moved, s)
	if err != nil {
		t.Fatal(err)
	}
	difference := make([]complex128, len(s.FrequencyHz))
	for i := range difference {
		difference[i] = other.Clean()[i] - b.Clean()[i]
	}
	e := b.Shift(difference)
	for q, want := range map[Quantity]float64{ResonanceHz: 0.01, ResistanceOhm: 18e-4, ShuntFarad: 3.2e-16} {
		if math.Abs(e[q]/want-1) > 1e-3 {
			t.Errorf("quantity %d moves by %g, want %g", q, e[q], want)
		}
	}
}

func TestUndetermined(t *testing.T) {
	u := unitOf(25e6, 18, 5.5e-15, 1.6e-12)
	s := Sweep{FrequencyHz: []float64{25e6}, Port: constant(piNetwork), NoiseRMS: 1e-6}
	if _, err := Of(u, s); err != ErrUndetermined {
		t.Errorf("one sample for four parameters: %v, want ErrUndetermined", err)
	}
}

func TestRice(t *testing.T) {
	for _, x := range []float64{1e-6, 0.3, 1, 7, 60, 99.9, 100.1, 3000} {
		// The ratio of the two integrals, by the trapezium rule.
		var zero, one float64
		n := 60 + 8*int(math.Sqrt(x))
		for k := range n + 1 {
			w := 1.0
			if k == 0 || k == n {
				w = 0.5
			}
			a := math.Pi * float64(k) / float64(n)
			e := w * math.Exp(x*(math.Cos(a)-1))
			zero, one = zero+e, one+e*math.Cos(a)
		}
		if got := besselRatio(x); math.Abs(got-one/zero) > 1e-11 {
			t.Errorf("I1/I0 at %g: %.14g, want %.14g", x, got, one/zero)
		}
	}
	if got := riceInformation(0.01) / 1e-4; math.Abs(got-1) > 1e-3 {
		t.Errorf("information at 0.01 is %g u^2, want u^2", got)
	}
	if a, b := riceInformation(24.999), riceInformation(25.001); math.Abs(a-b) > 1e-5 {
		t.Errorf("information at 25 jumps from %g to %g", a, b)
	}
}
