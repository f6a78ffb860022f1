package leastsquares

import (
	"math"
	"testing"
)

func TestGram(t *testing.T) {
	random := fixedRandom(10)
	for _, n := range []int{1, 2, 3, 5, gramBlock - 1, gramBlock, gramBlock + 1, 2*gramBlock + 7} {
		for p := 1; p <= 13; p++ {
			jacobian, residual := make([]float64, n*p), make([]float64, n)
			for i := range jacobian {
				jacobian[i] = random.NormFloat64()
			}
			for i := range residual {
				residual[i] = random.NormFloat64()
			}
			product, gradient := make([]float64, p*p), make([]float64, p)
			gram(jacobian, residual, product, gradient)
			for k := range p {
				for j := k; j <= p; j++ {
					other, got := residual, gradient[k]
					if j < p {
						other, got = jacobian[j*n:(j+1)*n], product[k*p+j]
					}
					var want float64
					for i, a := range jacobian[k*n : (k+1)*n] {
						want += a * other[i]
					}
					if math.Abs(got-want) > 1e-13*float64(n) {
						t.Fatalf("n %d p %d: product of columns %d and %d is %g, want %g", n, p, k, j, got, want)
					}
				}
			}
		}
	}
}

// twins has its first and third column equal: their sum is determined, they are not.
func twins() *linear {
	return &linear{column: [][]float64{{1, 1, 1, 1, 1}, {-2, -1, 0, 1, 2}, {1, 1, 1, 1, 1}}, y: []float64{1, 2, 2, 4, 5}}
}

// blend has a fourth column that is made of the second and third, as exactly as rounding allows. The first stands at right angles
// to all of them.
func blend() *linear {
	m := &linear{column: [][]float64{{-2, -1, 0, 1, 2}, {1, 1, 1, 1, 1}, {2, -1, -2, -1, 2}, nil}, y: []float64{1, 2, 2, 4, 5}}
	for i, c := range m.column[2] {
		m.column[3] = append(m.column[3], 0.1*m.column[1][i]+0.7*c)
	}
	return m
}

func TestRankDeficient(t *testing.T) {
	tests := []struct {
		name   string
		model  *linear
		bound  []bool
		rank   int
		values []float64 // of the bound parameters; NaN for the others
	}{
		{"twin columns", twins(), []bool{false, true, false}, 2, []float64{math.NaN(), 1, math.NaN()}},
		{"equal but for rounding", blend(), []bool{true, false, false, false}, 3, []float64{1, math.NaN(), math.NaN(), math.NaN()}},
		{"a column of zeros", &linear{column: [][]float64{{0, 0, 0, 0, 0}, {-2, -1, 0, 1, 2}}, y: []float64{1, 2, 2, 4, 5}},
			[]bool{false, true}, 1, []float64{math.NaN(), 1}},
		{"nothing at all", &linear{column: [][]float64{{0, 0, 0}}, y: []float64{1, 2, 3}}, []bool{false}, 0, []float64{math.NaN()}},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			var w Workspace
			p := len(test.bound)
			params := make([]float64, p)
			for k := range params {
				params[k] = 5
			}
			res := w.Fit(test.model, len(test.model.y), params, Options{})
			if res.Status != Converged || !res.RankDeficient || res.Rank != test.rank {
				t.Errorf("%+v", res)
			}
			for k, bound := range test.bound {
				variance := w.Covariance()[k*p+k]
				if bound && relative(variance, 0.1) > 1e-13 { // 1/(4+1+0+1+4)
					t.Errorf("variance of parameter %d is %g, want 0.1", k, variance)
				}
				if !bound && !math.IsInf(variance, 1) {
					t.Errorf("variance of parameter %d is %g, want +Inf", k, variance)
				}
				if bound && relative(params[k], test.values[k]) > 1e-13 {
					t.Errorf("parameter %d is %g, want %g", k, params[k], test.values[k])
				}
				if math.IsNaN(params[k]) || math.IsInf(params[k], 0) {
					t.Errorf("parameter %d is %g", k, params[k])
				}
			}
			scaled, moved := make([]float64, p*p), make([]float64, p)
			w.ScaledCovariance(scaled, res.ResidualVariance)
			shift := make([]float64, len(test.model.y))
			for i := range shift {
				shift[i] = float64(i)
			}
			w.Response(moved, shift)
			for k, bound := range test.bound {
				want := 0.0
				if bound { // −Σ (i−2) i / 10
					want = -1
				}
				if math.Abs(moved[k]-want) > 1e-13 {
					t.Errorf("response of parameter %d is %g, want %g", k, moved[k], want)
				}
				for j := range p {
					if c := w.Covariance()[k*p+j]; j != k && math.Abs(c) > 1e-14 {
						t.Errorf("covariance of parameters %d and %d is %g, want 0", k, j, c)
					}
				}
			}
			for _, v := range append(scaled, moved...) {
				if math.IsNaN(v) {
					t.Errorf("NaN in %v or %v", scaled, moved)
				}
			}
		})
	}
}

// Polynomials of degree 9 at 1.00, 1.05 .. 2.00 have columns that agree to one part in 1e9: the normal equations would lose
// every digit, reflections keep half of them. Coefficients are whole numbers, so the answer is known.
func TestIllConditionedPolynomial(t *testing.T) {
	const p, n = 10, 21
	m := &linear{y: make([]float64, n)}
	for range p {
		m.column = append(m.column, make([]float64, n))
	}
	for i := range n {
		x, power := 1+float64(i)/20, 1.0
		for k := range p {
			m.column[k][i] = power
			m.y[i] += float64(k+1) * power
			power *= x
		}
	}
	var w Workspace
	params := make([]float64, p)
	res := w.Fit(m, n, params, Options{})
	if res.Status != Converged || res.RankDeficient || res.SmallestPivot > pivotLimit {
		t.Fatalf("%+v", res)
	}
	for k := range params {
		// The condition of the columns scaled to unit length is about 1e10; 2e-16 times that, and a little more.
		if relative(params[k], float64(k+1)) > 1e-4 {
			t.Errorf("coefficient %d is %.10g, want %d", k, params[k], k+1)
		}
	}
	if rms := math.Sqrt(res.SumOfSquares / n); rms > 1e-11 {
		t.Errorf("rms residual %g of values up to 1e4", rms)
	}
}

// Both ways to the triangle give the same step and covariance where both work.
func TestTwoWaysToTheTriangle(t *testing.T) {
	m := newLorentzian(101, 3)
	m.fill(trueResonance, 0.01, fixedRandom(11))
	n, p := len(m.sample), len(trueResonance)
	var w Workspace
	w.Fit(m, n, append([]float64(nil), crudeStart...), Options{IterationLimit: 2})
	covariance := append([]float64(nil), w.Covariance()...)
	w.solveUndamped()
	step := make([]float64, p)
	for j, k := range w.order {
		step[k] = w.y[j] / w.length[k]
	}
	if !w.householder(&w.now) || w.rank != p {
		t.Fatal("reflections failed")
	}
	w.covarianceTo(w.covariance, w.unbounded)
	w.solveUndamped()
	for j, k := range w.order {
		if relative(w.y[j]/w.length[k], step[k]) > 1e-11 {
			t.Errorf("step of parameter %d: %g by reflections, %g by normal equations", k, w.y[j]/w.length[k], step[k])
		}
	}
	for i, c := range covariance {
		if math.Abs(w.covariance[i]-c) > 1e-11*math.Abs(covariance[0]) {
			t.Errorf("covariance %d: %g by reflections, %g by normal equations", i, w.covariance[i], c)
		}
	}
}

// A damped step has the length of the radius, and lies where the gradient of the damped problem vanishes.
func TestDampedStep(t *testing.T) {
	m := newLorentzian(101, 3)
	m.fill(trueResonance, 0.01, fixedRandom(12))
	n, p := len(m.sample), len(trueResonance)
	for _, byReflection := range []bool{false, true} {
		var w Workspace
		start := []float64{0.2, 0.4, 1.0, 2.0, 0.1, 0.1}
		w.Fit(m, n, append([]float64(nil), start...), Options{IterationLimit: 1})
		if byReflection && !w.householder(&w.now) {
			t.Fatal("reflections failed")
		}
		w.rescale()
		for _, radius := range []float64{1e-6, 1e-3, 0.1, 1} {
			w.radius, w.damping = radius, 0
			predicted, slope := w.step()
			if math.Abs(w.extent-radius) > 0.1*radius && w.damping > 0 {
				t.Errorf("radius %g: step of %g", radius, w.extent)
			}
			if w.damping == 0 && w.extent > 1.1*radius {
				t.Errorf("radius %g: undamped step of %g", radius, w.extent)
			}
			// Jᵀ(r + Jδ) + λ D²δ = 0, with J and r as evaluated
			step := make([]float64, p)
			for j, k := range w.order {
				step[k] = w.y[j] / w.length[k]
			}
			moved := append([]float64(nil), w.now.residual...)
			for k := range p {
				for i := range moved {
					moved[i] += w.now.jacobian[k*n+i] * step[k]
				}
			}
			cost, after, along := dot(w.now.residual, w.now.residual), dot(moved, moved), 0.0
			for i, r := range w.now.residual {
				along += 2 * r * (r - moved[i])
			}
			if math.Abs(predicted-(cost-after)) > 1e-12*cost || math.Abs(slope-along) > 1e-12*cost {
				t.Errorf("radius %g: reduction %g and slope %g predicted, want %g and %g", radius, predicted, slope, cost-after, along)
			}
			for k := range p {
				column := w.now.jacobian[k*n : (k+1)*n]
				g := dot(column, moved) + w.damping*w.scale[k]*w.scale[k]*step[k]
				if math.Abs(g) > 1e-11*norm(column)*norm(w.now.residual) {
					t.Errorf("radius %g: gradient %g by parameter %d", radius, g, k)
				}
			}
		}
	}
}

// Columns whose squares are beyond the range of float64 are still columns.
func TestExtremeUnits(t *testing.T) {
	m := &linear{column: [][]float64{{1e-160, 1e-160, 1e-160, 1e-160}, {0, 1e160, 2e160, 3e160}}, y: []float64{1, 3, 2, 5}}
	var w Workspace
	params := []float64{0, 0}
	res := w.Fit(m, 4, params, Options{Tolerance: 1e-9})
	if res.Status != Converged || relative(params[0], 1.1e160) > 1e-13 || relative(params[1], 1.1e-160) > 1e-13 {
		t.Errorf("%v %+v", params, res)
	}
}

// A determined parameter keeps the variance it would have if the twins were one, and has no covariance with either of them.
func TestCovarianceBesideTwins(t *testing.T) {
	one := []float64{1, 1, 1, 1, 1}
	m := &linear{column: [][]float64{{1, 2, 3, 4, 6}, one, one}, y: []float64{1, 2, 2, 4, 5}}
	var w Workspace
	res := w.Fit(m, 5, []float64{0, 0, 0}, Options{})
	// The slope of a straight line: 1/Σ(x − 3.2)² = 1/14.8.
	c := w.Covariance()
	if !res.RankDeficient || relative(c[0], 1/14.8) > 1e-13 {
		t.Errorf("variance of the slope %g, want %g: %+v", c[0], 1/14.8, res)
	}
	for _, i := range []int{1, 2, 3, 6, 5, 7} {
		if c[i] != 0 {
			t.Errorf("covariance %d is %g, want 0", i, c[i])
		}
	}
}

// The same from a triangle given by hand, in which the determined parameter comes first: columns 1 and 2 are twins.
func TestCovarianceOfATriangle(t *testing.T) {
	var tri triangle
	tri.resize(3)
	copy(tri.r, []float64{1, 0.6, 0.6, 0, 0.8, 0.8, 0, 0, 0})
	copy(tri.length, []float64{2, 1, 1})
	copy(tri.order, []int{0, 1, 2})
	tri.rank = 2
	c, unbounded := make([]float64, 9), make([]bool, 3)
	tri.covarianceTo(c, unbounded)
	inf := math.Inf(1)
	for i, want := range []float64{1.5625 / 4, 0, 0, 0, inf, 0, 0, 0, inf} { // 1 + (0.6/0.8)², over the squared length
		if c[i] != want && relative(c[i], want) > 1e-15 {
			t.Errorf("covariance %d is %g, want %g", i, c[i], want)
		}
	}
}
