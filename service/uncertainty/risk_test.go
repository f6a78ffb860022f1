package uncertainty

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

// population reads the prior of a row.
func population(t *testing.T, text string) Distribution {
	t.Helper()
	var a, b float64
	if n, _ := fmt.Sscanf(text, "normal mean %g sd %g", &a, &b); n == 2 {
		return NormalPopulation{a, b}
	}
	if n, _ := fmt.Sscanf(text, "gamma shape %g scale %g", &a, &b); n == 2 {
		return GammaPopulation{a, b}
	}
	t.Fatalf("prior %q", text)
	return nil
}

// TestDecisionRuleRows holds every row of the published decision rules, whatever it is about.
func TestDecisionRuleRows(t *testing.T) {
	rows := readRows(t, "decision_rules.csv")
	if len(rows) != 69 {
		t.Errorf("%d rows, want 69", len(rows))
	}
	inf := math.Inf(1)
	for _, row := range rows {
		tolerance := Interval{limit(t, row["tolerance_lower"], -inf), limit(t, row["tolerance_upper"], inf)}
		acceptance := Interval{limit(t, row["accept_lower"], -inf), limit(t, row["accept_upper"], inf)}
		u := limit(t, row["u"], 0)
		var got float64
		switch row["output"] {
		case "p_conform":
			got = Conformance(number(t, row["y"]), u, tolerance.Lower, tolerance.Upper)
		case "p_nonconform": // nothing is tested: all are accepted
			got = GlobalRisk(population(t, row["prior"]), 1, tolerance, Unbounded()).Consumer
		case "consumer_risk":
			got = GlobalRisk(population(t, row["prior"]), u, tolerance, acceptance).Consumer
		case "producer_risk":
			got = GlobalRisk(population(t, row["prior"]), u, tolerance, acceptance).Producer
		case "consumer_risk_given_accepted":
			got = GlobalRisk(population(t, row["prior"]), u, tolerance, acceptance).ConsumerAmongAccepted()
		case "acceptance_limit":
			got = tolerance.Upper - GuardFor(population(t, row["prior"]), u, tolerance, 0.001)
		case "p_false_accept_worst":
			got = Nonconformance(acceptance.Upper, u, tolerance.Lower, tolerance.Upper)
		case "z":
			got = GuardFactor(number(t, strings.TrimPrefix(row["example"], "z-")))
		default:
			t.Errorf("%s: output %q is not known", row["example"], row["output"])
			continue
		}
		within(t, row, got)
	}
}

// TestGlobalRiskBySampling draws a population with another generator of truth than the integral: units, measured and held against the limits.
func TestGlobalRiskBySampling(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	tolerance, acceptance := Interval{-10, 10}, Interval{-8.36, 8.36}
	r := GlobalRisk(NormalPopulation{1, 5}, 1, tolerance, acceptance)
	const n = 200000
	var consumer, producer, accepted float64
	for range n {
		eta := 1 + 5*rng.NormFloat64()
		accept, good := acceptance.Contains(eta+rng.NormFloat64()), tolerance.Contains(eta)
		if accept {
			accepted++
		}
		switch {
		case accept && !good:
			consumer++
		case !accept && good:
			producer++
		}
	}
	for _, c := range []struct {
		name      string
		got, want float64
	}{{"consumer", consumer / n, r.Consumer}, {"producer", producer / n, r.Producer}, {"accepted", accepted / n, r.Accepted}} {
		if sd := math.Sqrt(c.want * (1 - c.want) / n); math.Abs(c.got-c.want) > 4*sd {
			t.Errorf("%s: %.5f of the draws, the integral says %.5f", c.name, c.got, c.want)
		}
	}
}

// TestJointConformance: closed forms, and draws where there is none.
func TestJointConformance(t *testing.T) {
	inf := math.Inf(1)
	free := []float64{-inf, -inf, -inf, -inf, -inf}
	equal := func(n int, rho float64) []float64 {
		c := make([]float64, n*n)
		for i := range n {
			for k := range n {
				c[i*n+k] = rho
				if i == k {
					c[i*n+k] = 1
				}
			}
		}
		return c
	}
	for _, c := range []struct {
		name, source       string
		values, covariance []float64
		lower, upper       []float64
		want, tol          float64
	}{
		{"one", "JCGM 106:2012 clause 7", []float64{57}, []float64{1.44}, []float64{-inf}, []float64{60}, 0.9937903347, 1e-9},
		{"independent", "product of probabilities", []float64{0, 0, 0}, equal(3, 0), free[:3], []float64{1, 1, 1}, math.Pow(NormalProbability(1), 3), 2e-5},
		{"two above 0, correlation one half", "1/4 + asin(rho)/(2 pi), W. F. Sheppard 1899", []float64{0, 0}, equal(2, 0.5), []float64{0, 0}, []float64{inf, inf}, 1.0 / 3, 2e-4},
		{"three above 0, correlation one half", "1/(n + 1) for equal correlations of one half (R. L. Plackett 1954)", []float64{0, 0, 0}, equal(3, 0.5), []float64{0, 0, 0}, []float64{inf, inf, inf}, 0.25, 3e-4},
		{"five above 0, correlation one half", "same", make([]float64, 5), equal(5, 0.5), make([]float64, 5), []float64{inf, inf, inf, inf, inf}, 1.0 / 6, 4e-4},
		{"one thing read twice", "as one", []float64{0, 0}, equal(2, 1), free[:2], []float64{1, 1}, NormalProbability(1), 2e-4},
		{"opposite", "P(|y| < 1)", []float64{0, 0}, []float64{1, -1, -1, 1}, free[:2], []float64{1, 1}, 2*NormalProbability(1) - 1, 2e-4},
		{"an exact one inside", "as the other", []float64{0, 5}, []float64{1, 0, 0, 0}, free[:2], []float64{1, 6}, NormalProbability(1), 2e-4},
		{"an exact one outside", "impossible", []float64{0, 7}, []float64{1, 0, 0, 0}, free[:2], []float64{1, 6}, 0, 0},
	} {
		if c.source == "" {
			t.Errorf("%s: no source", c.name)
		}
		if got := JointConformance(c.values, c.covariance, c.lower, c.upper); !(math.Abs(got-c.want) <= c.tol) {
			t.Errorf("%s: %.6f, want %.6f (%s)", c.name, got, c.want, c.source)
		}
	}
}

// TestJointConformanceBySampling: five levels that share a third of their variance, one near its limit.
func TestJointConformanceBySampling(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	values := []float64{55, 57, 58.2, 57.5, 50}
	shared := []float64{0.7, 0.7, 0.8, 0.6, 0.5}
	own := []float64{1, 1, 0.9, 1.2, 1}
	n := len(values)
	covariance, lower, upper := make([]float64, n*n), make([]float64, n), make([]float64, n)
	for i := range n {
		lower[i], upper[i] = math.Inf(-1), 60
		for k := range n {
			covariance[i*n+k] = shared[i] * shared[k]
		}
		covariance[i*n+i] += own[i] * own[i]
	}
	got := JointConformance(values, covariance, lower, upper)
	const draws = 200000
	inside := 0
	for range draws {
		common, all := rng.NormFloat64(), true
		for i := range n {
			all = values[i]+shared[i]*common+own[i]*rng.NormFloat64() <= 60 && all
		}
		if all {
			inside++
		}
	}
	want := float64(inside) / draws
	if sd := math.Sqrt(want * (1 - want) / draws); math.Abs(got-want) > 4*sd+1e-4 {
		t.Errorf("joint probability %.5f, %.5f of the draws", got, want)
	}
}
