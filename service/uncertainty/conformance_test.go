package uncertainty

import (
	"math"
	"testing"
)

// Far out, a probability of conformance or its complement is small, and still right to many digits.
func TestConformanceTails(t *testing.T) {
	inf := math.Inf(1)
	tests := []struct {
		name                string
		value, lower, upper float64 // u = 1
		conforms, not       float64
	}{
		{"deep inside one limit", -8, -inf, 0, 1, bigTail(8)},
		{"far outside one limit", 8, -inf, 0, bigTail(8), 1},
		{"far below a lower limit", -20, 0, inf, bigTail(20), 1},
		{"deep inside two limits", 0, -7, 9, 1 - bigTail(7) - bigTail(9), bigTail(7) + bigTail(9)},
		{"far above two limits", 15, -5, 5, bigTail(10) - bigTail(20), 1},
		{"far below two limits", -15, -5, 5, bigTail(10) - bigTail(20), 1},
		{"a little outside two near limits", 6, 4, 5, bigTail(1) - bigTail(2), 1 - bigTail(1) + bigTail(2)},
		{"no limits", 3, -inf, inf, 1, 0},
		{"limits much closer than the uncertainty", 0, -1e-9, 3e-9, 4e-9 / math.Sqrt(2*math.Pi), 1 - 4e-9/math.Sqrt(2*math.Pi)},
		{"both tails", 0, -2, 2, 1 - 2*bigTail(2), 2 * bigTail(2)},
	}
	for _, test := range tests {
		if got := Conformance(test.value, 1, test.lower, test.upper); relative(got, test.conforms) > 1e-13 {
			t.Errorf("%s: conformance %.15g, want %.15g", test.name, got, test.conforms)
		}
		if got := Nonconformance(test.value, 1, test.lower, test.upper); got != test.not && relative(got, test.not) > 1e-13 {
			t.Errorf("%s: nonconformance %.15g, want %.15g", test.name, got, test.not)
		}
	}
}

func TestConformanceEdges(t *testing.T) {
	inf, nan := math.Inf(1), math.NaN()
	tests := []struct {
		name                         string
		value, u, lower, upper, want float64
	}{
		{"exact, inside", 1, 0, 0, 2, 1},
		{"exact, on the limit", 2, 0, 0, 2, 1},
		{"exact, outside", 3, 0, 0, 2, 0},
		{"exact, open", 3, 0, -inf, inf, 1},
		{"value is NaN", nan, 1, 0, 2, 0},
		{"exact NaN without limits", nan, 0, -inf, inf, 0},
		{"value is infinite", inf, 1, 0, inf, 0},
		{"uncertainty is NaN", 1, nan, 0, 2, 0},
		{"uncertainty is negative", 1, -1, 0, 2, 0},
		{"nothing known, one limit", 1, inf, -inf, 2, 0.5},
		{"nothing known, two limits", 1, inf, 0, 2, 0},
		{"nothing known, no limit", 1, inf, -inf, inf, 1},
		{"limits reversed", 1, 1, 2, 0, 0},
		{"limits reversed, exact", 1, 0, 2, 0, 0},
		{"limit is NaN", 1, 1, nan, 2, 0},
		{"tiny uncertainty inside", 1, 1e-300, 0, 2, 1},
		{"tiny uncertainty outside", 3, 1e-300, 0, 2, 0},
	}
	for _, test := range tests {
		got := Conformance(test.value, test.u, test.lower, test.upper)
		not := Nonconformance(test.value, test.u, test.lower, test.upper)
		if got != test.want || not != 1-test.want {
			t.Errorf("%s: %g and %g, want %g", test.name, got, not, test.want)
		}
	}
}

// Both probabilities lie in 0..1, add up to 1, and conformance falls as the estimate moves away from the middle.
func TestConformanceProperties(t *testing.T) {
	for _, u := range []float64{1e-3, 0.1, 1, 5, 100} {
		last := 2.0
		for y := 0.0; y < 40; y += 0.05 {
			p, q := Conformance(y, u, -10, 10), Nonconformance(y, u, -10, 10)
			if !(p >= 0 && p <= 1 && q >= 0 && q <= 1) || math.Abs(p+q-1) > 1e-15 {
				t.Fatalf("y %g u %g: %g and %g", y, u, p, q)
			}
			if p > last*(1+1e-13) {
				t.Fatalf("y %g u %g: conformance rises to %g", y, u, p)
			}
			if mirrored := Conformance(-y, u, -10, 10); math.Abs(mirrored-p) > 1e-15*p {
				t.Fatalf("y %g u %g: %g on one side, %g on the other", y, u, p, mirrored)
			}
			last = p
		}
	}
}

func TestInterval(t *testing.T) {
	inf, nan := math.Inf(1), math.NaN()
	a, b, far := Interval{0, 4}, Interval{3, 6}, Interval{9, 10}
	none := Interval{1, 0}
	for _, test := range []struct {
		name      string
		got, want Interval
	}{
		{"around", Around(5, 2), Interval{3, 7}},
		{"intersection", a.Intersect(b), Interval{3, 4}},
		{"hull", a.Hull(far), Interval{0, 10}},
		{"hull with nothing", none.Hull(b), b},
		{"hull of nothing", b.Hull(none), b},
		{"guarded", a.Guard(1), Interval{1, 3}},
		{"widened", a.Guard(-1), Interval{-1, 5}},
		{"guarded, open below", Interval{-inf, 4}.Guard(1), Interval{-inf, 3}},
		{"guarded, open", Unbounded().Guard(inf), Unbounded()},
		{"widened without end", a.Guard(-inf), Unbounded()},
	} {
		if test.got != test.want {
			t.Errorf("%s: %v, want %v", test.name, test.got, test.want)
		}
	}
	for _, test := range []struct {
		name      string
		got, want bool
	}{
		{"overlap", a.Overlaps(b), true},
		{"touching overlap", a.Overlaps(Interval{4, 5}), true},
		{"apart", a.Overlaps(far), false},
		{"guard wider than the interval", a.Guard(3).Empty(), true},
		{"infinite guard", a.Guard(inf).Empty(), true},
		{"NaN end", Interval{nan, 1}.Empty(), true},
		{"intersection with NaN", a.Intersect(Interval{nan, 2}).Empty(), true},
		{"ends are inside", a.Contains(0) && a.Contains(4), true},
		{"outside", a.Contains(4.1), false},
		{"NaN is nowhere", Unbounded().Contains(nan), false},
		{"within", Interval{1, 2}.Within(a), true},
		{"not within", b.Within(a), false},
		{"nothing is within", none.Within(far), true},
	} {
		if test.got != test.want {
			t.Errorf("%s: %v", test.name, test.got)
		}
	}
}
