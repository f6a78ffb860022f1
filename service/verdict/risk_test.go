package verdict

import (
	"math"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/parttype"
	"example.com/admit/service/uncertainty"
)

// looks has a unit inspected until it is decided, by Weigh as the service does it, and reports whether it is accepted.
func looks(rng *rand.Rand, o Operating, value float64) bool {
	limit := parttype.Limit{Quantity: parttype.MotionalResistance, Bounds: o.Bounds}
	decision := parttype.Decision{Rule: o.Rule, Confidence: o.Confidence, Attempts: o.Attempts, AfterLastAttempt: parttype.SetAside}
	common := o.Common * rng.NormFloat64()
	ev := Evidence{Limits: []parttype.Limit{limit}}
	for n := range o.Attempts {
		ev.AttemptsUsed = n
		ev.Readings = []Reading{{
			Quantity: limit.Quantity, Where: Nowhere, Unit: UnitOhm, HasValue: true,
			Measured: Value{value + common + o.Individual*rng.NormFloat64(), math.Hypot(o.Individual, o.Common)}, CommonUncertainty: o.Common,
		}}
		j := Weigh(decision, ev)
		if j.Verdict != Retest {
			return j.Verdict == Pass
		}
		if past, ok := PastOf(&j.Findings[0]); ok {
			ev.Past = []Past{past}
		}
	}
	return false
}

// TestRiskAgainstDecisions: bad units that pass and good ones that do not, counted over what Weigh decides of a stated population, against the
// integrals of JCGM 106, for one and for several attempts. The bounds are those of the binomial distribution at 99.9 %, as eighteen figures are compared.
func TestRiskAgainstDecisions(t *testing.T) {
	n := 20000
	if testing.Short() {
		n = 4000
	}
	rng := rand.New(rand.NewPCG(8, 9))
	for _, o := range []Operating{
		{Rule: parttype.Simple, Confidence: 0.95, Bounds: parttype.Bounds{Min: at(-10), Max: at(10)}, Individual: 0.6, Common: 0.8, Attempts: 1},
		{Rule: parttype.GuardedAcceptance, Confidence: 0.95, Bounds: parttype.Bounds{Min: at(-10), Max: at(10)}, Individual: 0.6, Common: 0.8, Attempts: 1},
		{Rule: parttype.GuardedAcceptance, Confidence: 0.95, Bounds: parttype.Bounds{Min: at(-10), Max: at(10)}, Individual: 0.8, Common: 0.6, Attempts: 2},
		{Rule: parttype.GuardedBoth, Confidence: 0.95, Bounds: parttype.Bounds{Max: at(8)}, Individual: 1.2, Common: 0.5, Attempts: 2},
		{Rule: parttype.GuardedRejection, Confidence: 0.9, Bounds: parttype.Bounds{Max: at(8)}, Individual: 1, Common: 0, Attempts: 2},
		{Rule: parttype.GuardedAcceptance, Confidence: 0.8, Bounds: parttype.Bounds{Min: at(-8)}, Individual: 1.5, Common: 0, Attempts: 3},
	} {
		population := uncertainty.NormalPopulation{Centre: 1, Spread: 5}
		tolerance := intervalOf(o.Bounds)
		want := o.Risk(population)
		var consumer, producer, accepted float64
		for range n {
			value := population.Centre + population.Spread*rng.NormFloat64()
			pass, good := looks(rng, o, value), tolerance.Contains(value)
			if pass {
				accepted++
			}
			switch {
			case pass && !good:
				consumer++
			case !pass && good:
				producer++
			}
		}
		for _, c := range []struct {
			name        string
			count, want float64
		}{{"consumer's risk", consumer, want.Consumer}, {"producer's risk", producer, want.Producer}, {"accepted", accepted, want.Accepted}} {
			if sd := math.Sqrt(c.want * (1 - c.want) * float64(n)); math.Abs(c.count-c.want*float64(n)) > 3.29*sd+1 {
				t.Errorf("%s, %d attempts: %s %.5f of the units, the integral says %.5f", o.Rule, o.Attempts, c.name, c.count/float64(n), c.want)
			}
		}
		t.Logf("%s, %d attempts: R_C %.4f %%, R_P %.3f %%", o.Rule, o.Attempts, 100*want.Consumer, 100*want.Producer)
	}
}

// TestRiskOfOneAttempt is that of the published rows, by another way: guard bands of 1.645 u on both sides.
func TestRiskOfOneAttempt(t *testing.T) {
	o := Operating{Rule: parttype.Simple, Bounds: parttype.Bounds{Min: at(-10), Max: at(10)}, Individual: 0.6, Common: 0.8, Attempts: 1}
	r := o.Risk(uncertainty.NormalPopulation{Centre: 0, Spread: 4})
	// JCGM 106:2012 clause 9 for sd 4, u 1, limits 10: row global-sd4-um1-w0 of testdata/decision_rules.csv of package uncertainty.
	if math.Abs(r.Consumer-0.002445348713) > 1e-7 || math.Abs(r.Producer-0.005319389091) > 1e-7 {
		t.Errorf("risks %.9f and %.9f", r.Consumer, r.Producer)
	}
	o.Rule, o.Confidence = parttype.GuardedAcceptance, 0.95
	u := math.Hypot(0.6, 0.8)
	r = o.Risk(uncertainty.NormalPopulation{Centre: 0, Spread: 4})
	guard := uncertainty.GuardFactor(0.95) * u
	want := uncertainty.GlobalRisk(uncertainty.NormalPopulation{Centre: 0, Spread: 4}, u, intervalOf(o.Bounds), intervalOf(o.Bounds).Guard(guard))
	if math.Abs(r.Consumer-want.Consumer) > 1e-7 || math.Abs(r.Producer-want.Producer) > 1e-7 {
		t.Errorf("guarded: %+v, want %+v", r, want)
	}
}

// TestAtTheLimit: of units exactly at a limit the first attempt accepts 5 % at 95 %. A second one adds little where most of the uncertainty is common, and
// never as much as the first.
func TestAtTheLimit(t *testing.T) {
	n := 5000
	if testing.Short() {
		n = 1000
	}
	rng := rand.New(rand.NewPCG(10, 11))
	for _, c := range []struct {
		individual, common, most float64 // of two attempts
	}{{0.05, 0.1, 0.065}, {0.1, 0.05, 0.085}, {0.1, 0, 0.095}} {
		o := Operating{Rule: parttype.GuardedAcceptance, Confidence: 0.95, Bounds: parttype.Bounds{Max: at(40)}, Individual: c.individual, Common: c.common, Attempts: 1}
		if p := o.Accept(40); math.Abs(p-0.05) > 1e-6 {
			t.Errorf("one attempt accepts %.6f at the limit, want 0.05", p)
		}
		o.Attempts = 2
		p := o.Accept(40)
		if p <= 0.05 || p > c.most {
			t.Errorf("individual %g, common %g: two attempts accept %.4f at the limit, want at most %g", c.individual, c.common, p, c.most)
		}
		for _, attempts := range []int{1, 2} {
			o.Attempts = attempts
			accepted := 0.0
			for range n {
				if looks(rng, o, 40) {
					accepted++
				}
			}
			want := o.Accept(40)
			if sd := math.Sqrt(want * (1 - want) / float64(n)); math.Abs(accepted/float64(n)-want) > 2.58*sd {
				t.Errorf("individual %g, common %g, %d attempts: %.4f accepted, want %.4f", c.individual, c.common, attempts, accepted/float64(n), want)
			}
		}
		t.Logf("individual %g, common %g: two attempts accept %.4f at the limit", c.individual, c.common, p)
	}
}
