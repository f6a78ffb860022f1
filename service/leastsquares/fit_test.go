package leastsquares

import (
	"math"
	"slices"
	"testing"
)

var trueResonance = []float64{0.8, -0.3, 0.2, 1.1, 0.05, -0.02}
var crudeStart = []float64{0.6, 0, 0, 1, 0, 0}

func TestLinearProblemTakesOneStep(t *testing.T) {
	m := &linear{column: [][]float64{{1, 1, 1, 1}, {0, 1, 2, 3}}, y: []float64{1, 3, 2, 5}}
	var w Workspace
	params := []float64{7, -3}
	res := w.Fit(m, 4, params, Options{Tolerance: 1e-9})
	// By hand: slope 11/10, intercept 11/10, residuals −0.1 0.8 −1.3 0.6, their squares 2.7; (AᵀA)⁻¹ = [0.7 −0.3; −0.3 0.2].
	if res.Status != Converged || res.Iterations != 1 || res.Evaluations != 2 {
		t.Errorf("%+v", res)
	}
	for k, want := range []float64{1.1, 1.1} {
		if relative(params[k], want) > 1e-14 {
			t.Errorf("parameter %d is %.17g, want %g", k, params[k], want)
		}
	}
	if relative(res.SumOfSquares, 2.7) > 1e-13 || relative(res.ResidualVariance, 1.35) > 1e-13 || res.DegreesOfFreedom != 2 {
		t.Errorf("sum of squares %g, variance %g, freedom %d", res.SumOfSquares, res.ResidualVariance, res.DegreesOfFreedom)
	}
	for i, want := range []float64{0.7, -0.3, -0.3, 0.2} {
		if relative(w.Covariance()[i], want) > 1e-13 {
			t.Errorf("covariance %d is %.17g, want %g", i, w.Covariance()[i], want)
		}
	}
}

// The scatter of fitted parameters over many noise draws is what the covariance says, and the mean is right.
func TestCovarianceIsTheScatter(t *testing.T) {
	const draws, sigma = 2000, 0.01
	random := fixedRandom(1)
	m := newLorentzian(101, 4)
	var w Workspace
	p := len(trueResonance)
	sum, squares, claimed := make([]float64, p), make([]float64, p), make([]float64, p)
	covariance := make([]float64, p*p)
	inside := 0
	for range draws {
		m.fill(trueResonance, sigma, random)
		params := slices.Clone(crudeStart)
		res := w.Fit(m, len(m.sample), params, Options{})
		if res.Status != Converged {
			t.Fatalf("%+v", res)
		}
		w.ScaledCovariance(covariance, res.ResidualVariance)
		for k := range p {
			d := params[k] - trueResonance[k]
			sum[k] += d
			squares[k] += d * d
			claimed[k] += covariance[k*p+k]
			if d*d < 1.96*1.96*covariance[k*p+k] {
				inside++
			}
		}
	}
	for k := range p {
		// The standard deviation of 2000 draws is itself known to 1.6 %.
		if ratio := math.Sqrt(squares[k] / claimed[k]); math.Abs(ratio-1) > 0.06 {
			t.Errorf("parameter %d scatters by %.3f of what is claimed", k, ratio)
		}
		if bias := sum[k] / draws / math.Sqrt(claimed[k]/draws); math.Abs(bias) > 0.1 {
			t.Errorf("parameter %d is biased by %.2f deviations", k, bias)
		}
	}
	if covered := float64(inside) / float64(draws*p); math.Abs(covered-0.95) > 0.01 {
		t.Errorf("95 %% intervals cover %.3f", covered)
	}
}

// Changing the units of the parameters by powers of two changes nothing, to the last bit.
func TestUnitsDoNotMatter(t *testing.T) {
	m := newLorentzian(64, 4)
	m.fill(trueResonance, 0.02, fixedRandom(2))
	unit := []float64{0x1p40, 0x1p-50, 0x1p-3, 0x1p60, 0x1p-20, 1}
	scaled := modelFunc(func(params, residual, jacobian []float64) {
		inner := make([]float64, len(params))
		for k := range params {
			inner[k] = params[k] * unit[k]
		}
		m.Evaluate(inner, residual, jacobian)
		for k := range params {
			if jacobian != nil {
				for i := range residual {
					jacobian[k*len(residual)+i] *= unit[k]
				}
			}
		}
	})
	for _, options := range []Options{{}, {InitialDamping: 1}, {HuberThreshold: 0.03, ComplexPairs: true}} {
		var plain, other Workspace
		a := []float64{0.5, 0.2, 1.0, 0.5, 0, 0} // far enough for damped and refused steps
		b := slices.Clone(a)
		for k := range b {
			b[k] /= unit[k]
		}
		first := plain.Fit(m, len(m.sample), a, options)
		second := other.Fit(scaled, len(m.sample), b, options)
		if first != second {
			t.Errorf("results differ:\n%+v\n%+v", first, second)
		}
		if first.Status != Converged || first.Iterations < 4 {
			t.Errorf("%+v: this fit proves little", first)
		}
		for k := range a {
			if a[k] != b[k]*unit[k] {
				t.Errorf("parameter %d: %.17g and %.17g", k, a[k], b[k]*unit[k])
			}
		}
	}
}

// A workspace that served larger and smaller problems before gives the bits of a fresh one.
func TestWorkspaceKeepsNothing(t *testing.T) {
	var used, fresh Workspace
	large := newLorentzian(501, 3)
	large.fill(trueResonance, 0.1, fixedRandom(3))
	options := Options{HuberThreshold: 0.05, ComplexPairs: true, InitialDamping: 0.1}
	used.Fit(large, len(large.sample), slices.Clone(crudeStart), options)
	used.Fit(twins(), 5, []float64{0, 0, 0}, Options{})
	small := newLorentzian(101, 3)
	small.fill(trueResonance[:4], 0.01, fixedRandom(4))
	a, b := slices.Clone(crudeStart[:4]), slices.Clone(crudeStart[:4])
	first := used.Fit(small, len(small.sample), a, Options{})
	second := fresh.Fit(small, len(small.sample), b, Options{})
	if first != second || !slices.Equal(a, b) || !slices.Equal(used.Covariance(), fresh.Covariance()) {
		t.Errorf("%+v %v\n%+v %v", first, a, second, b)
	}
}

func TestResultBelongsToTheParameters(t *testing.T) {
	m := newLorentzian(101, 3)
	m.fill(trueResonance, 0.05, fixedRandom(5))
	var w Workspace
	params := slices.Clone(crudeStart)
	res := w.Fit(m, len(m.sample), params, Options{})
	if m.calls != res.Evaluations {
		t.Errorf("%d evaluations counted, %d made", res.Evaluations, m.calls)
	}
	residual := make([]float64, len(m.sample))
	jacobian := make([]float64, len(m.sample)*len(params))
	m.Evaluate(params, residual, jacobian)
	if !slices.Equal(residual, w.Residual()) || !slices.Equal(jacobian, w.Jacobian()) || dot(residual, residual) != res.SumOfSquares {
		t.Error("residual, Jacobian or sum of squares are not those of the parameters returned")
	}
}

// Without noise the fit ends at the rounding of the data and says that it did.
func TestNoiseFree(t *testing.T) {
	m := newLorentzian(401, 5)
	m.fill(trueResonance, 0, fixedRandom(6))
	for _, options := range []Options{{}, {ResidualFloor: 1e-12}, {HuberThreshold: 1e-3, ComplexPairs: true}} {
		var w Workspace
		params := slices.Clone(crudeStart)
		res := w.Fit(m, len(m.sample), params, options)
		if res.Status != Converged || res.Evaluations > 12 {
			t.Errorf("%+v", res)
		}
		for k, want := range trueResonance {
			if relative(params[k], want) > 1e-12 {
				t.Errorf("parameter %d is %.17g, want %g", k, params[k], want)
			}
		}
	}
}

func TestHostileModels(t *testing.T) {
	m := newLorentzian(101, 3)
	m.fill(trueResonance, 0.01, fixedRandom(7))
	n := len(m.sample)
	nan := math.NaN()
	visits := 0
	outside := func(p []float64) bool {
		out := math.Abs(p[2]) > 1.4 || p[3] > 2.5 || p[3] < 0.25
		if out {
			visits++
		}
		return out
	}
	tests := []struct {
		name    string
		model   modelFunc
		start   []float64
		options Options
		status  Status
		reason  Reason
		solved  bool
	}{
		{
			name: "most of parameter space does not exist", start: []float64{0.5, 0, 1, 0.3, 0, 0}, status: Converged, solved: true,
			model: func(p, r, j []float64) {
				m.Evaluate(p, r, j)
				if outside(p) {
					r[7] = nan
				}
			},
		},
		{
			name: "derivatives do not exist there", start: []float64{0.5, 0, 1, 0.3, 0, 0}, status: Converged, solved: true,
			model: func(p, r, j []float64) {
				m.Evaluate(p, r, j)
				if j != nil && outside(p) {
					j[2*len(r)+3] = math.Inf(1)
				}
			},
		},
		{
			name: "start is NaN", start: crudeStart, status: NotFinite, reason: BadStart,
			model: func(p, r, j []float64) { m.Evaluate(p, r, j); r[0] = nan },
		},
		{
			name: "derivative at the start is infinite", start: crudeStart, status: NotFinite, reason: BadStart,
			model: func(p, r, j []float64) {
				m.Evaluate(p, r, j)
				if j != nil {
					j[5] = math.Inf(-1)
				}
			},
		},
		{
			name: "derivatives have the wrong sign", start: crudeStart, status: Stalled, reason: NoDescent,
			options: Options{IterationLimit: 1000},
			model: func(p, r, j []float64) {
				m.Evaluate(p, r, j)
				for i := range j {
					j[i] = -j[i]
				}
			},
		},
		{
			name: "too few steps", start: crudeStart, status: NotConverged, reason: LimitReached, options: Options{IterationLimit: 2},
			model: m.Evaluate,
		},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			var w Workspace
			visits = 0
			params := slices.Clone(test.start)
			res := w.Fit(test.model, n, params, test.options)
			if res.Status != test.status || res.Status != Converged && res.Reason != test.reason {
				t.Fatalf("%v (%v), want %v (%v): %+v", res.Status, res.Reason, test.status, test.reason, res)
			}
			if test.status == Stalled && res.Jacobians != 2 {
				// the start and the first trial; what follows a refused step needs residuals only
				t.Errorf("%d of %d evaluations asked for derivatives, want 2", res.Jacobians, res.Evaluations)
			}
			if test.solved {
				for k, want := range trueResonance {
					if math.Abs(params[k]-want) > 0.02 {
						t.Errorf("parameter %d is %g, want about %g", k, params[k], want)
					}
				}
				if visits == 0 || res.Refused == 0 {
					t.Error("no step went where the model does not exist: this fit proves nothing")
				}
			}
			for _, v := range append([]float64{res.Cost, res.SumOfSquares, res.ResidualVariance, res.Offset}, params...) {
				if math.IsNaN(v) {
					t.Errorf("NaN in %+v %v", res, params)
				}
			}
			for _, v := range w.Covariance() {
				if math.IsNaN(v) {
					t.Error("NaN in the covariance")
				}
			}
		})
	}
}

func TestMalformed(t *testing.T) {
	tests := []struct {
		name             string
		residuals, count int
		options          Options
	}{
		{"no parameters", 4, 0, Options{}},
		{"no residuals", 0, 2, Options{}},
		{"fewer residuals than parameters", 1, 2, Options{}},
		{"half a complex sample", 5, 2, Options{ComplexPairs: true}},
		{"scale of another length", 4, 2, Options{Scale: []float64{1}}},
		{"scale of zero", 4, 2, Options{Scale: []float64{1, 0}}},
	}
	for _, test := range tests {
		var w Workspace
		model := modelFunc(func(_, _, _ []float64) { t.Errorf("%s: the model was asked", test.name) })
		res := w.Fit(model, test.residuals, make([]float64, test.count), test.options)
		if res.Status != Malformed || res.Reason != BadStart {
			t.Errorf("%s: %v (%v)", test.name, res.Status, res.Reason)
		}
	}
}

// As many residuals as parameters: a solution without a variance.
func TestNoFreedom(t *testing.T) {
	m := &linear{column: [][]float64{{1, 1}, {1, -1}}, y: []float64{2, -4}}
	var w Workspace
	params := []float64{0, 0}
	res := w.Fit(m, 2, params, Options{})
	if res.Status != Converged || math.Abs(params[0]+1) > 1e-13 || math.Abs(params[1]-3) > 1e-13 {
		t.Errorf("%v %+v", params, res)
	}
	if !math.IsInf(res.ResidualVariance, 1) || res.DegreesOfFreedom != 0 {
		t.Errorf("variance %g with %d degrees of freedom", res.ResidualVariance, res.DegreesOfFreedom)
	}
	scaled := make([]float64, 4)
	w.ScaledCovariance(scaled, res.ResidualVariance)
	for i, want := range []float64{math.Inf(1), 0, 0, math.Inf(1)} {
		if scaled[i] != want {
			t.Errorf("covariance %d is %g, want %g", i, scaled[i], want)
		}
	}
}

// A given scale shapes the trusted region but not the solution.
func TestScale(t *testing.T) {
	m := newLorentzian(101, 3)
	m.fill(trueResonance, 0.01, fixedRandom(8))
	var w Workspace
	reference := slices.Clone(crudeStart)
	w.Fit(m, len(m.sample), reference, Options{Tolerance: 1e-9})
	params := []float64{0.5, 0, 1.3, 0.3, 0, 0}
	res := w.Fit(m, len(m.sample), params, Options{Tolerance: 1e-9, InitialDamping: 0.1, Scale: []float64{1, 1, 0.3, 1, 0.1, 0.1}})
	if res.Status != Converged {
		t.Fatalf("%+v", res)
	}
	for k := range params {
		if math.Abs(params[k]-reference[k]) > 1e-9 {
			t.Errorf("parameter %d is %.15g, unscaled %.15g", k, params[k], reference[k])
		}
	}
}

// Response is the derivative of the solution by an additive shift of the residuals.
func TestResponse(t *testing.T) {
	for _, options := range []Options{{Tolerance: 1e-10}, {Tolerance: 1e-10, HuberThreshold: 2.7e-3, ComplexPairs: true}} {
		m := newLorentzian(101, 3)
		m.fill(trueResonance, 1e-3, fixedRandom(9))
		shift, dst := make([]float64, len(m.sample)), make([]float64, len(trueResonance))
		for i := range shift {
			shift[i] = math.Sin(0.1 * float64(i))
		}
		solve := func(by float64) ([]float64, *Workspace) {
			moved := &lorentzian{x: m.x, sample: slices.Clone(m.sample)}
			for i := range shift {
				moved.sample[i] -= by * shift[i] // residual = model − sample
			}
			var w Workspace
			params := slices.Clone(crudeStart)
			if res := w.Fit(moved, len(m.sample), params, options); res.Status != Converged || options.HuberThreshold > 0 && res.Outlying == 0 {
				t.Fatalf("%+v", res)
			}
			return params, &w
		}
		_, w := solve(0)
		w.Response(dst, shift)
		const h = 1e-5
		above, _ := solve(h)
		below, _ := solve(-h)
		for k := range dst {
			// What first order leaves out is of the size of the residual, here 1e-3; that the weights follow, of the share of
			// samples beyond the threshold, here 3 %.
			want := (above[k] - below[k]) / (2 * h)
			tolerance := 0.005
			if options.HuberThreshold > 0 {
				tolerance = 0.05
			}
			if math.Abs(dst[k]-want) > tolerance*norm(dst) {
				t.Errorf("options %+v: response of parameter %d is %g, refitting gives %g", options, k, dst[k], want)
			}
		}
	}
}
