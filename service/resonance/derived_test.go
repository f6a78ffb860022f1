package resonance

import (
	"math"
	"math/rand/v2"
	"testing"

	"example.com/admit/service/crystal"
)

// example is an estimate with correlated parameters and two influences.
func example(p part, relative float64) *Estimate {
	est := &Estimate{State: Found}
	bw := p.unit.r1 / (2 * math.Pi * p.unit.l1)
	est.Value = [Parameters]float64{p.unit.fs, math.Log(p.unit.r1), math.Log(p.unit.l1), p.unit.c0}
	// Lower triangle of a root of the covariance, in natural units.
	root := [4][4]float64{{0.3}, {0.4, 1}, {-0.5, -0.3, 0.8}, {0.2, 0.5, 0.7, 1.5}}
	unit := [4]float64{bw * relative, relative, relative, p.unit.c0 * relative}
	for i := range 4 {
		est.Fitted[i] = true
		for k := range 4 {
			for j := range 4 {
				est.Statistical[i][k] += root[i][j] * root[k][j] * unit[i] * unit[k]
			}
		}
	}
	est.Systematic = []Contribution{
		contribution("gain_drift", "", [Parameters]float64{0, 2 * relative, -relative, 0}),
		contribution("calibration_standards", "load", [Parameters]float64{0, relative, 0, p.unit.c0 * relative}),
		contribution("calibration_standards", "open", [Parameters]float64{0, 0, 0, -2 * p.unit.c0 * relative}),
	}
	return est
}

func conditions(p part) Conditions {
	return Conditions{
		NominalHz: p.unit.fs * (1 - 20e-6), LoadCapacitanceFarad: 10e-12, LoadConnection: crystal.SeriesLoad,
		PullFromFarad: 8e-12, PullToFarad: 12e-12, NegativeResistanceOhm: -20 * p.unit.r1,
	}
}

// TestDeriveAgainstDraws: the standard uncertainties of every derived quantity are those of the quantity computed from parameters drawn with the
// estimate's covariance, and so is the correlation of two of them.
func TestDeriveAgainstDraws(t *testing.T) {
	rng := random(t, rand.Uint64())
	const relative, draws = 1e-4, 4000
	for _, p := range parts() {
		est := example(p, relative)
		c := conditions(p)
		d := Derive(est, c)
		total := est.Covariance()
		// Cholesky factor of the total covariance of the four fitted parameters.
		var l [4][4]float64
		for i := range 4 {
			for k := 0; k <= i; k++ {
				sum := total[i][k]
				for j := range k {
					sum -= l[i][j] * l[k][j]
				}
				if i == k {
					l[i][i] = math.Sqrt(sum)
				} else {
					l[i][k] = sum / l[k][k]
				}
			}
		}
		var sum, squares [Derivations]float64
		var cross float64
		for range draws {
			v := est.Value
			var z [4]float64
			for i := range z {
				z[i] = rng.NormFloat64()
				for k := 0; k <= i; k++ {
					v[i] += l[i][k] * z[k]
				}
			}
			values := circuitValues(&v, &c, false)
			for k := range values {
				e := values[k] - d[k].Value
				sum[k] += e
				squares[k] += e * e
			}
			cross += (values[LoadResonance] - d[LoadResonance].Value) * (values[MotionalCapacitance] - d[MotionalCapacitance].Value)
		}
		for k := Derivation(0); k < Derivations; k++ {
			if !d[k].Defined {
				t.Errorf("%s: quantity %d is not defined", p.name, k)
				continue
			}
			mean := sum[k] / draws
			sd := math.Sqrt(squares[k]/draws - mean*mean)
			if u := d[k].StandardUncertainty(); math.Abs(u/sd-1) > 5/math.Sqrt(2*draws)+0.01 {
				t.Errorf("%s: quantity %d: standard uncertainty %.5g, of draws %.5g", p.name, k, u, sd)
			}
		}
		var covariance float64
		a, b := &d[LoadResonance], &d[MotionalCapacitance]
		for i := range total {
			for k := range total[i] {
				covariance += a.Gradient[i] * total[i][k] * b.Gradient[k]
			}
		}
		scatter := a.StandardUncertainty() * b.StandardUncertainty()
		if math.Abs(covariance-cross/draws) > 6*scatter/math.Sqrt(draws) {
			t.Errorf("%s: correlation of fL and C1 %.3f, of draws %.3f", p.name, covariance/scatter, cross/draws/scatter)
		}
	}
}

// TestBudget: the shares of a budget add up in squares, groups of one name stand together, and names keep their order.
func TestBudget(t *testing.T) {
	est := example(parts()[2], 1e-4)
	d := Derive(est, conditions(parts()[2]))
	for k := range d {
		budget := est.Budget(nil, &d[k])
		var sum float64
		for _, s := range budget {
			sum += s.StandardUncertainty * s.StandardUncertainty
		}
		if u := d[k].StandardUncertainty(); math.Abs(math.Sqrt(sum)-u) > 1e-9*u {
			t.Errorf("quantity %d: shares add up to %g, want %g", k, math.Sqrt(sum), u)
		}
		if len(budget) != 3 || budget[0].Name != NoiseInfluence || budget[1].Name != "gain_drift" || budget[2].Name != "calibration_standards" {
			t.Errorf("quantity %d: budget %+v", k, budget)
		}
	}
}

// TestUndefined: quantities that were not asked for, or that the unit does not have, are undefined and nothing else.
func TestUndefined(t *testing.T) {
	p := parts()[2]
	d := Derive(example(p, 1e-4), Conditions{})
	for _, k := range []Derivation{LoadResonance, LoadResonanceResistance, PullingSensitivity, PullingRange, StartMargin, MotionalResonanceDeviation} {
		if d[k].Defined || d[k].Value != 0 || d[k].StandardUncertainty() != 0 {
			t.Errorf("quantity %d is defined without its condition: %+v", k, d[k])
		}
	}
	lossy := p
	lossy.unit.c0 = 1 / (2 * math.Pi * p.unit.fs * 1.5 * p.unit.r1) // M = 1.5
	d = Derive(example(lossy, 1e-4), conditions(lossy))
	for k, want := range map[Derivation]bool{Resonance: false, ResonanceResistance: false, Antiresonance: false, ResonanceDeviation: false,
		MotionalResonance: true, MotionalResistance: true, FigureOfMerit: true, ParallelResonance: true} {
		if d[k].Defined != want {
			t.Errorf("at M = 1.5 quantity %d: defined %v, want %v", k, d[k].Defined, want)
		}
	}
	unknown := example(p, 1e-4)
	unknown.ScaleUnknown = true
	d = Derive(unknown, conditions(p))
	for k := range d {
		want := Derivation(k) == MotionalResonance || Derivation(k) == QualityFactor || Derivation(k) == MotionalResonanceDeviation
		if d[k].Defined != want {
			t.Errorf("with an unknown scale quantity %d: defined %v, want %v", k, d[k].Defined, want)
		}
	}
}
