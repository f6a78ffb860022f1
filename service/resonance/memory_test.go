package resonance

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
	"time"

	"example.com/admit/service/sweep"
)

// pole returns the complex frequency at which the unit rings in the network by itself: the zero of R1 + jX + Zp, by Newton's rule.
func (u truth) pole(n fixture) complex128 {
	q := complex(u.fs, (u.r1+real(n.c))/(4*math.Pi*u.l1))
	fs := complex(u.fs, 0)
	for range 20 {
		d := 1 + n.c*(complex(u.g0, 0)+complex(0, 2*math.Pi*u.c0)*q)
		value := complex(u.r1, 0) + complex(0, 2*math.Pi*u.l1)*(q-fs)*(q+fs)/q + n.c/d
		slope := complex(0, 2*math.Pi*u.l1)*(1+fs*fs/(q*q)) - n.c*n.c*complex(0, 2*math.Pi*u.c0)/(d*d)
		q -= value / slope
	}
	return q
}

// swept returns the samples of a stepped sweep by the state of the motional arm in the test's own words: at each frequency the current goes from
// where it was to its steady value along exp(lambda t), and the receiver averages the tail. What rings, rings at the pole.
func swept(u truth, n fixture, frequencies []float64, dwell, averaging, leadIn float64) []complex128 {
	out := make([]complex128, len(frequencies))
	q := u.pole(n)
	ringing := 1 + n.c*(complex(u.g0, 0)+complex(0, 2*math.Pi*u.c0)*q)
	var i1 complex128
	for i, f := range frequencies {
		y0 := complex(u.g0, 2*math.Pi*f*u.c0)
		z := complex(u.r1, 2*math.Pi*u.l1*(f-u.fs)*(f+u.fs)/f)
		zp := n.c / (1 + n.c*y0)
		lambda := complex(0, 2*math.Pi) * (q - complex(f, 0))
		steady := 1 / (1 + n.c*y0) / (z + zp)
		if i == 0 {
			i1 = steady * (1 - cmplx.Exp(lambda*complex(leadIn, 0)))
		}
		from, to := cmplx.Exp(lambda*complex(dwell-averaging, 0)), cmplx.Exp(lambda*complex(dwell, 0))
		mean := (to - from) / (lambda * complex(averaging, 0))
		total := (y0+steady)/(1+n.c*y0) + (i1-steady)*mean/ringing // port current over source voltage
		i1 = steady + (i1-steady)*to
		out[i] = n.a + (n.b-n.a*n.c)*total
	}
	return out
}

func TestSweptAgainstIntegration(t *testing.T) {
	p := parts()[1]
	u, n := p.unit, p.in
	bw := u.bandwidth(n)
	tau := 1 / (math.Pi * bw)
	frequencies := grid(u.fs, 2*bw, 9)
	dwell := 0.3 * tau
	// Runge-Kutta of the fourth order on di/dt = lambda (i - steady), sample averaged by the trapezium rule.
	const steps = 4000
	h := dwell / steps
	const leadSteps = 6667 // about half a time constant
	got := swept(u, n, frequencies, dwell, dwell/2, leadSteps*h)
	var i1 complex128
	for k, f := range frequencies {
		y0 := complex(0, 2*math.Pi*f*u.c0)
		d := 1 + n.c*y0
		lambda := complex(0, 2*math.Pi) * (u.pole(n) - complex(f, 0))
		steady := 1 / (d * (complex(u.r1, 2*math.Pi*u.l1*(f-u.fs)*(f+u.fs)/f) + n.c/d))
		rate := func(i complex128) complex128 { return lambda * (i - steady) }
		step := func() {
			a := rate(i1)
			b := rate(i1 + a*complex(h/2, 0))
			c := rate(i1 + b*complex(h/2, 0))
			e := rate(i1 + c*complex(h, 0))
			i1 += (a + 2*b + 2*c + e) * complex(h/6, 0)
		}
		if k == 0 {
			for range leadSteps {
				step()
			}
		}
		for range steps / 2 {
			step()
		}
		sum := i1 / 2
		for j := range steps / 2 {
			step()
			if j == steps/2-1 {
				sum += i1 / 2
			} else {
				sum += i1
			}
		}
		want := n.b * (y0 + sum/(steps/2)) / d
		if cmplx.Abs(got[k]-want) > 1e-6*u.peak(n) {
			t.Errorf("point %d: %v, integrated %v", k, got[k], want)
		}
	}
}

// fast builds a request of a fast sweep.
func fast(u truth, n fixture, frequencies []float64, dwell, averaging float64) *Request {
	req := measured(u, n, frequencies)
	// The stated times are whole nanoseconds, and the sweep takes what is stated.
	req.Sweep.Timing = sweep.Timing{Dwell: time.Duration(dwell * 1e9), Averaging: time.Duration(averaging * 1e9), Phase: sweep.PhaseContinuous}
	for i, v := range swept(u, n, frequencies, req.Sweep.Timing.Dwell.Seconds(), req.Sweep.Timing.Averaging.Seconds(), 0) {
		req.Sweep.Re[i], req.Sweep.Im[i] = real(v), imag(v)
	}
	return req
}

// sweptSample is the sampler of bound for a fast sweep; each moved unit is swept once.
func sweptSample(frequencies []float64, dwell, averaging float64) func(fixture, truth, int) complex128 {
	swept1 := map[truth][]complex128{}
	return func(n fixture, u truth, i int) complex128 {
		if swept1[u] == nil {
			swept1[u] = swept(u, n, frequencies, dwell, averaging, 0)
		}
		return swept1[u][i]
	}
}

// TestFastEfficiency: sweeps with a dwell from ten time constants down to a fiftieth of one reach the bound of a sweep that was that fast, and cover
// the truth, while the settled model is far off.
func TestFastEfficiency(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 100
	if testing.Short() {
		trials = 30
	}
	var all tally
	for _, p := range parts() {
		bw := p.unit.bandwidth(p.in)
		tau := 1 / (math.Pi * bw)
		frequencies := grid(p.unit.fs, 5*bw, 401)
		for _, ratio := range []float64{10, 1, 0.2, 0.05, 0.02} {
			clean := fast(p.unit, p.in, frequencies, ratio*tau, ratio*tau/2)
			timing := clean.Sweep.Timing
			rms := p.unit.peak(p.in) / decibels(60)
			limit := bound(p.unit, p.in, frequencies, rms, sweptSample(frequencies, timing.Dwell.Seconds(), timing.Averaging.Seconds()))
			var cell tally
			var f Fitter
			var est Estimate
			for range trials {
				if f.Fit(noisy(clean, rms, rng), &est); est.State != Found || !est.Quality.Memory {
					t.Fatalf("%s, dwell of %g time constants: %s %s, memory %v", p.name, ratio, est.State, est.Detail, est.Quality.Memory)
				}
				cell.add(&est, p.unit, limit)
			}
			cell.check(t, fmt.Sprintf("%s, dwell of %g time constants", p.name, ratio), 0, 0, 0)
			all.merge(&cell)

			settled := *clean
			s := *clean.Sweep
			s.Timing = sweep.Timing{Phase: sweep.PhaseRestarted}
			settled.Sweep = &s
			f.Fit(&settled, &est)
			t.Logf("%s, dwell of %g time constants: settled model off by %.3g ppm, R1 %+.2g %%", p.name, ratio,
				(est.Value[ResonanceHz]/p.unit.fs-1)*1e6, 100*(math.Exp(est.Value[LogResistance])/p.unit.r1-1))
		}
	}
	all.check(t, "all together", 0, 0.02, 0)
}

// TestUnstatedTiming: without any timing a sweep that was too fast is noticed, the dwell is found from the samples, and Q comes out within what its
// uncertainty says. With the dwell alone the samples show that the phase is continuous.
func TestUnstatedTiming(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 20
	if testing.Short() {
		trials = 6
	}
	tried, answered, within := 0, 0, 0
	for _, p := range parts() {
		bw := p.unit.bandwidth(p.in)
		tau := 1 / (math.Pi * bw)
		frequencies := grid(p.unit.fs, 5*bw, 401)
		for _, snr := range []float64{60, 70} {
			for _, ratio := range []float64{2, 1, 0.3, 0.1} {
				clean := fast(p.unit, p.in, frequencies, ratio*tau, ratio*tau)
				dwell := clean.Sweep.Timing.Dwell
				for trial := range trials {
					clean.Sweep.Timing = sweep.Timing{}
					if trial%2 == 0 {
						clean.Sweep.Timing.Dwell = dwell
					}
					var f Fitter
					var est Estimate
					f.Fit(noisy(clean, p.unit.peak(p.in)/decibels(snr), rng), &est)
					tried++
					if est.State != Found {
						continue
					}
					answered++
					if e, sd := errorsOf(&est, p.unit); math.Abs(e[4]) <= 3*sd[4] {
						within++
					}
					if off := est.Quality.DwellSeconds/dwell.Seconds() - 1; math.Abs(off) > 0.1 {
						t.Errorf("%s, dwell of %g time constants: found it %+.1f %% off", p.name, ratio, 100*off)
					}
				}
			}
		}
	}
	if float64(answered) < 0.95*float64(tried) || float64(within) < 0.97*float64(answered) {
		t.Errorf("%d sweeps, %d answered, %d of them with Q within three standard uncertainties", tried, answered, within)
	}
}

// TestRefusedTiming: where memory cannot be modelled a short dwell is refused, with the dwell that is needed.
func TestRefusedTiming(t *testing.T) {
	p := parts()[1]
	bw := p.unit.bandwidth(p.in)
	tau := 1 / (math.Pi * bw)
	frequencies := grid(p.unit.fs, 5*bw, 401)
	settled := measured(p.unit, p.in, frequencies)
	ringing := fast(p.unit, p.in, frequencies, 0.5*tau, 0.25*tau)
	seconds := func(s float64) time.Duration { return time.Duration(s * 1e9) }
	for _, c := range []struct {
		name   string
		req    *Request
		timing sweep.Timing
		want   State
	}{
		{"phase restarted, short dwell", settled, sweep.Timing{Dwell: seconds(3 * tau), Phase: sweep.PhaseRestarted}, SweptTooFast},
		{"phase restarted, averaged after a long wait", settled, sweep.Timing{Dwell: seconds(7.5 * tau), Averaging: seconds(0.4 * tau), Phase: sweep.PhaseRestarted}, Found},
		{"phase restarted, long dwell averaged from its beginning", settled, sweep.Timing{Dwell: seconds(20 * tau), Phase: sweep.PhaseRestarted}, SweptTooFast},
		{"phase unstated, short dwell, no ringing to show it", settled, sweep.Timing{Dwell: seconds(3 * tau)}, SweptTooFast},
		{"stated dwell is a third of the true one", ringing, sweep.Timing{Dwell: seconds(0.17 * tau), Averaging: seconds(0.02 * tau), Phase: sweep.PhaseRestarted}, SweptTooFast},
	} {
		req := noisy(c.req, p.unit.peak(p.in)/decibels(50), random(t, 3))
		req.Sweep.Timing = c.timing
		var f Fitter
		var est Estimate
		if f.Fit(req, &est); est.State != c.want {
			t.Errorf("%s: %s %s, want %s", c.name, est.State, est.Detail, c.want)
		}
		if c.want == SweptTooFast && est.Detail == "" {
			t.Errorf("%s: no word of the dwell that is needed", c.name)
		}
	}
}

// TestLeadIn: the resonator's state at the first point follows the time that the source stood there before.
func TestLeadIn(t *testing.T) {
	p := parts()[1]
	bw := p.unit.bandwidth(p.in)
	tau := 1 / (math.Pi * bw)
	frequencies := grid(p.unit.fs+2*bw, 2*bw, 101) // begins on the resonance
	for _, lead := range []float64{0, 0.7 * tau, 20 * tau} {
		req := measured(p.unit, p.in, frequencies)
		req.Sweep.Timing = sweep.Timing{
			Dwell: time.Duration(0.2 * tau * 1e9), LeadIn: time.Duration(lead * 1e9), Phase: sweep.PhaseContinuous,
		}
		dwell := req.Sweep.Timing.Dwell.Seconds()
		for i, v := range swept(p.unit, p.in, frequencies, dwell, dwell, req.Sweep.Timing.LeadIn.Seconds()) {
			req.Sweep.Re[i], req.Sweep.Im[i] = real(v), imag(v)
		}
		var f Fitter
		var est Estimate
		f.Fit(noisy(req, p.unit.peak(p.in)/decibels(90), random(t, 5)), &est)
		if e, sd := errorsOf(&est, p.unit); est.State != Found || math.Abs(e[0]) > 5*sd[0] || math.Abs(e[1]) > 5*sd[1] {
			t.Errorf("lead-in of %.1f time constants: %s %s, fs off by %.1f and R1 by %.1f standard deviations", lead/tau, est.State, est.Detail, e[0]/sd[0], e[1]/sd[1])
		}
	}
}
