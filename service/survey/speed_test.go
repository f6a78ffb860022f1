package survey

import (
	"math/rand/v2"
	"testing"

	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
)

// benchmarkRequest is the survey of the speed table: a main mode and three further ones, 10, 20 and 30 dB below it.
func benchmarkRequest(points int, snr float64, fast bool) *Request {
	u, n := tenMegahertz(), piNetwork
	main := u.modes[0]
	bw := main.width(n)
	u.modes = append(u.modes, unwanted(main, n, 10.00603e6, 10, 200), unwanted(main, n, 10.0152e6, 20, 150), unwanted(main, n, 10.0181e6, 30, 130))
	f := grid(10e6-50*bw, 10e6+50*bw, points)
	req := settled(u, n, f)
	if fast {
		req = ringing(u, n, f, 200e-6, 100e-6)
	}
	return noisy(req, u.peak(n)*decibels(-snr), rand.New(rand.NewPCG(1, 2)))
}

func BenchmarkSurvey(b *testing.B) {
	for _, c := range []struct {
		name string
		fast bool
	}{{"settled", false}, {"ringing", true}} {
		b.Run("points=1601/modes=4/"+c.name, func(b *testing.B) {
			req := benchmarkRequest(1601, 60, c.fast)
			var v Surveyor
			var out Result
			v.Survey(req, &out)
			if len(out.Modes) != 4 {
				b.Fatalf("%d modes", len(out.Modes))
			}
			b.ReportAllocs()
			for b.Loop() {
				v.Survey(req, &out)
			}
			b.ReportMetric(float64(out.Quality.Rounds), "rounds")
			b.ReportMetric(float64(out.Quality.Iterations), "iterations")
		})
	}
}

// BenchmarkJointFit is the joint refit alone, from the solution a little off.
func BenchmarkJointFit(b *testing.B) {
	req := benchmarkRequest(1601, 60, false)
	var v Surveyor
	var out Result
	v.Survey(req, &out)
	start := append([]float64(nil), v.now.params...)
	for k := 1; k < len(start); k += 3 {
		start[k] += 5
		start[k+1] += 0.02
	}
	b.ReportAllocs()
	for b.Loop() {
		copy(v.now.params, start)
		v.fit(&v.now, tightTolerance, tightLimit)
	}
}

func BenchmarkEvaluate(b *testing.B) {
	req := benchmarkRequest(1601, 60, false)
	var v Surveyor
	var out Result
	v.Survey(req, &out)
	r, j := make([]float64, 3202), make([]float64, 3202*len(v.now.params))
	b.Run("jacobian", func(b *testing.B) {
		for b.Loop() {
			v.model.Evaluate(v.now.params, r, j)
		}
	})
	b.Run("residual", func(b *testing.B) {
		for b.Loop() {
			v.model.Evaluate(v.now.params, r, nil)
		}
	})
	b.Run("scan", func(b *testing.B) {
		v.look()
		for b.Loop() {
			v.search()
		}
	})
}

// A Surveyor whose buffers have grown allocates nothing.
func TestNoAllocation(t *testing.T) {
	for _, fast := range []bool{false, true} {
		req := benchmarkRequest(401, 60, fast)
		changed := *req.Terms
		changed.B = append([]complex128(nil), changed.B...)
		for i := range changed.B {
			changed.B[i] *= 1.001
		}
		req.Contributions = []network.Contribution{{Name: network.InfluenceGainDrift, Terms: changed}}
		req.ClockUncertainty = 2e-8
		var v Surveyor
		var out Result
		v.Survey(req, &out)
		if out.State != resonance.Found {
			t.Fatal(out.State, out.Detail)
		}
		if got := testing.AllocsPerRun(5, func() { v.Survey(req, &out) }); got != 0 {
			t.Errorf("fast %v: %g allocations a survey", fast, got)
		}
	}
}
