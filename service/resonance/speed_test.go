package resonance

import (
	"math"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/network"
)

// typical is a sweep of 401 points at 60 dB with ten influences, as a calibrated station sends them.
func typical(seed uint64) *Request {
	p := parts()[2]
	frequencies := grid(p.unit.fs, 5*p.unit.bandwidth(p.in), 401)
	rng := rand.New(rand.NewPCG(seed, 2))
	req := noisy(measured(p.unit, p.in, frequencies), p.unit.peak(p.in)/1000, rng)
	req.NoiseRMS = p.unit.peak(p.in) / 1000
	for range 10 {
		req.Contributions = append(req.Contributions, network.Contribution{Name: "gain_drift", Terms: *off(p.in, "gain", 1e-3).terms(401)})
	}
	return req
}

// ringing is the same unit swept with a dwell of a fifth of a time constant.
func ringing(seed uint64) *Request {
	p := parts()[2]
	bw := p.unit.bandwidth(p.in)
	tau := 1 / (math.Pi * bw)
	req := fast(p.unit, p.in, grid(p.unit.fs, 5*bw, 401), 0.2*tau, 0.1*tau)
	return noisy(req, p.unit.peak(p.in)/1000, rand.New(rand.NewPCG(seed, 2)))
}

// TestNoAllocation: a Fitter that has seen its sizes allocates nothing.
func TestNoAllocation(t *testing.T) {
	p := parts()[2]
	unknown := typical(1)
	unknown.ScaleUnknown = true
	wild := typical(2)
	wild.Sweep.Re[77] += p.unit.peak(p.in) / 2
	for name, req := range map[string]*Request{
		"settled": typical(3), "wild point": wild, "unknown network": unknown, "magnitudes": magnitudes(typical(4)), "ringing": ringing(5),
		"impedances": measured(p.unit, impedances, grid(p.unit.fs, 5*p.unit.bandwidth(impedances), 401)),
	} {
		var f Fitter
		var est Estimate
		f.Fit(req, &est)
		if est.State != Found {
			t.Fatalf("%s: %s %s", name, est.State, est.Detail)
		}
		if n := testing.AllocsPerRun(20, func() { f.Fit(req, &est) }); n != 0 {
			t.Errorf("%s: %g allocations a fit", name, n)
		}
	}
}

// from returns a start near the solution, as a circle fit would give it: a tenth of the loaded width and a few percent off.
func from(f *Fitter) [mostParameters]float64 {
	start := f.best.params
	start[ResonanceHz] += 0.1 * f.best.loaded.halfHz
	start[LogResistance] += 0.02
	start[LogInductance] -= 0.02
	start[ShuntCapacitanceFarad] *= 1.05
	return start
}

func benchmarkStart(b *testing.B, req *Request) {
	var f Fitter
	var est Estimate
	f.Fit(req, &est)
	start := from(&f)
	evaluations := 0
	b.ReportAllocs()
	for b.Loop() {
		f.best = solution{params: start}
		f.solve(&f.best, 0, startIterations)
		evaluations = f.best.result.Evaluations
	}
	b.ReportMetric(float64(evaluations), "evaluations")
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "fits/s")
}

// BenchmarkOneStart is one fit of 401 settled points from one start, covariance included.
func BenchmarkOneStart(b *testing.B) { benchmarkStart(b, typical(1)) }

// BenchmarkMemoryStart is the same with the resonator's memory in the model.
func BenchmarkMemoryStart(b *testing.B) { benchmarkStart(b, ringing(1)) }

func benchmarkWhole(b *testing.B, req *Request) {
	var f Fitter
	var est Estimate
	f.Fit(req, &est)
	b.ReportAllocs()
	for b.Loop() {
		f.Fit(req, &est)
	}
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "fits/s")
}

// The whole path of a sweep: preparation, starts, fit, gates, residual tests, optional parameters, covariance and ten influences.
func BenchmarkWholePath(b *testing.B) { benchmarkWhole(b, typical(1)) }

// BenchmarkWholePathWild needs every start and Huber weights.
func BenchmarkWholePathWild(b *testing.B) {
	req := typical(1)
	req.Sweep.Re[77] += 0.01
	benchmarkWhole(b, req)
}

func BenchmarkWholePathRinging(b *testing.B)   { benchmarkWhole(b, ringing(1)) }
func BenchmarkWholePathMagnitude(b *testing.B) { benchmarkWhole(b, magnitudes(typical(1))) }

// BenchmarkDerive is every derived quantity with its uncertainty.
func BenchmarkDerive(b *testing.B) {
	est := example(parts()[2], 1e-4)
	c := conditions(parts()[2])
	for b.Loop() {
		Derive(est, c)
	}
}
