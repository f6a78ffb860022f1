package leastsquares

import (
	"fmt"
	"slices"
	"testing"
	"time"
)

// A workspace that has seen a problem of the size allocates nothing, whichever way the fit goes.
func TestNoAllocation(t *testing.T) {
	m := newLorentzian(401, 4)
	m.fill(trueResonance, 1e-3, fixedRandom(30))
	for i := 0; i < 40; i++ { // some samples beyond the Huber threshold
		m.sample[20*i] += 0.1
	}
	eckerle, deficient := readNIST(t, "Eckerle4"), twins()
	tests := []struct {
		name    string
		model   Model
		n       int
		start   []float64
		options Options
	}{
		{"plain", m, len(m.sample), crudeStart, Options{}},
		{"weighted", m, len(m.sample), crudeStart, Options{ComplexPairs: true, HuberThreshold: 0.003}},
		{"scaled and damped", m, len(m.sample), crudeStart, Options{InitialDamping: 0.1, Scale: []float64{1, 1, 1, 1, 1, 1}}},
		{"with refused steps", eckerle, len(eckerle.y), eckerle.start[0], Options{}},
		{"by reflections", deficient, len(deficient.y), []float64{0, 0, 0}, Options{}},
	}
	var w Workspace
	for _, test := range tests {
		params, covariance := make([]float64, len(test.start)), make([]float64, len(test.start)*len(test.start))
		shift := make([]float64, test.n)
		run := func() {
			copy(params, test.start)
			res := w.Fit(test.model, test.n, params, test.options)
			w.ScaledCovariance(covariance, res.ResidualVariance)
			w.Response(params, shift)
		}
		if got := testing.AllocsPerRun(20, run); got != 0 {
			t.Errorf("%s: %g allocations a fit", test.name, got)
		}
	}
}

// timed adds up the time that a model takes, so that the solver's own can be told.
type timed struct {
	Model
	spent time.Duration
}

func (m *timed) Evaluate(params, residual, jacobian []float64) {
	began := time.Now()
	m.Model.Evaluate(params, residual, jacobian)
	m.spent += time.Since(began)
}

// BenchmarkFit fits 401 complex samples of a resonance with noise 80 dB below its peak: without weights from a crude start, and
// with Huber weights from where the first fit ended, as a fit that has to resist outliers would go on.
func BenchmarkFit(b *testing.B) {
	const rms = 1e-4
	for _, p := range []int{4, 5, 6} {
		m := newLorentzian(401, 5)
		m.fill(trueResonance[:p], rms/1.414, fixedRandom(31))
		var w Workspace
		end := slices.Clone(crudeStart[:p])
		w.Fit(m, len(m.sample), end, Options{})
		for _, bench := range []struct {
			name    string
			start   []float64
			options Options
		}{
			{"plain-from-crude-start", crudeStart, Options{}},
			{"huber-from-plain-fit", end, Options{ComplexPairs: true, HuberThreshold: 1.9 * rms}},
		} {
			b.Run(fmt.Sprintf("samples=401/params=%d/%s", p, bench.name), func(b *testing.B) {
				model := &timed{Model: m}
				var res Result
				params := make([]float64, p)
				b.ReportAllocs()
				for b.Loop() {
					copy(params, bench.start)
					res = w.Fit(model, len(m.sample), params, bench.options)
				}
				if res.Status != Converged {
					b.Fatalf("%+v", res)
				}
				per := float64(b.N)
				b.ReportMetric(per/b.Elapsed().Seconds(), "fits/s")
				b.ReportMetric((b.Elapsed()-model.spent).Seconds()*1e6/per, "solver-us")
				b.ReportMetric(model.spent.Seconds()*1e6/per, "model-us")
				b.ReportMetric(float64(res.Evaluations), "evaluations")
			})
		}
	}
}

// BenchmarkReduce is one pass over the Jacobian, each way.
func BenchmarkReduce(b *testing.B) {
	for _, p := range []int{4, 6, 8} {
		m := newLorentzian(401, 5)
		n := len(m.sample)
		var w Workspace
		w.resize(n, p)
		random := fixedRandom(32)
		for i := range w.now.jacobian {
			w.now.jacobian[i] = random.NormFloat64()
		}
		w.now.weighted = w.now.residual
		b.Run(fmt.Sprintf("rows=802/params=%d/way=normal-equations", p), func(b *testing.B) {
			for b.Loop() {
				w.reduce(&w.now)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N*n*p*(p+3)/2), "ns/product")
		})
		b.Run(fmt.Sprintf("rows=802/params=%d/way=reflections", p), func(b *testing.B) {
			for b.Loop() {
				w.householder(&w.now)
			}
		})
	}
}

// BenchmarkNIST fits a published set from its first start.
func BenchmarkNIST(b *testing.B) {
	for _, name := range []string{"Gauss1", "MGH09", "Thurber"} {
		b.Run(name, func(b *testing.B) {
			s := readNIST(b, name)
			var w Workspace
			params := slices.Clone(s.start[0])
			var res Result
			for b.Loop() {
				copy(params, s.start[0])
				res = w.Fit(s, len(s.y), params, Options{Tolerance: 1e-8, IterationLimit: 2000})
			}
			b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "fits/s")
			b.ReportMetric(float64(res.Evaluations), "evaluations")
		})
	}
}
