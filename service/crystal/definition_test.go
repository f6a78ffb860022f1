package crystal_test

import (
	"math"
	"math/big"

	"example.com/admit/service/crystal"
)

// The plain definitions of the circuit in 300-bit arithmetic: wL - 1/(wC), sums of admittances, nothing rearranged. The tests
// hold the package against them; they share no formula with it.

const precision = 300

func number(v float64) *big.Float { return new(big.Float).SetPrec(precision).SetFloat64(v) }

func sum(a, b *big.Float) *big.Float  { return number(0).Add(a, b) }
func diff(a, b *big.Float) *big.Float { return number(0).Sub(a, b) }
func prod(a, b *big.Float) *big.Float { return number(0).Mul(a, b) }
func quot(a, b *big.Float) *big.Float { return number(0).Quo(a, b) }

// twoPi is 2 pi to 60 digits (OEIS A019692).
func twoPi() *big.Float {
	v, _, err := big.ParseFloat("6.28318530717958647692528676655900576839433879875021164194989", 10, precision, big.ToNearestEven)
	if err != nil {
		panic(err)
	}
	return v
}

// phasor is a complex number of big floats.
type phasor struct{ re, im *big.Float }

func (a phasor) plus(b phasor) phasor { return phasor{sum(a.re, b.re), sum(a.im, b.im)} }

func (a phasor) squared() *big.Float { return sum(prod(a.re, a.re), prod(a.im, a.im)) }

func (a phasor) inverse() phasor {
	n := a.squared()
	return phasor{quot(a.re, n), quot(diff(number(0), a.im), n)}
}

// plainReactance is wL - 1/(wC) with C = 1/(ws^2 L).
func plainReactance(m crystal.Mode, frequencyHz *big.Float) *big.Float {
	w := prod(twoPi(), frequencyHz)
	ws := prod(twoPi(), number(m.ResonanceHz))
	l := number(m.InductanceHenry)
	c := quot(number(1), prod(prod(ws, ws), l))
	return diff(prod(w, l), quot(number(1), prod(w, c)))
}

// plainImpedance is Z of the whole unit.
func plainImpedance(u crystal.Unit, frequencyHz *big.Float) phasor {
	w := prod(twoPi(), frequencyHz)
	y := phasor{number(u.ShuntConductanceSiemens), prod(w, number(u.ShuntCapacitanceFarad))}
	for _, m := range u.Modes {
		y = y.plus(phasor{number(m.ResistanceOhm), plainReactance(m, frequencyHz)}.inverse())
	}
	return y.inverse().plus(phasor{number(0), prod(w, number(u.LeadInductanceHenry))})
}

// plainPhase has the sign of the reactance of unit and load: zero at a load resonance. No load is a capacitance of 0.
func plainPhase(u crystal.Unit, load float64, connection crystal.LoadConnection) func(*big.Float) *big.Float {
	return func(frequencyHz *big.Float) *big.Float {
		z := plainImpedance(u, frequencyHz)
		if load == 0 {
			return z.im
		}
		susceptance := prod(prod(twoPi(), frequencyHz), number(load))
		if connection == crystal.SeriesLoad {
			return diff(z.im, quot(number(1), susceptance))
		}
		return diff(number(0), sum(z.inverse().im, susceptance))
	}
}

// plainSlope has the sign of d|Y|^2/df, by a central difference far below the resolution of a double.
func plainSlope(u crystal.Unit) func(*big.Float) *big.Float {
	return func(frequencyHz *big.Float) *big.Float {
		h := prod(frequencyHz, number(0x1p-90))
		above := plainImpedance(u, sum(frequencyHz, h)).inverse().squared()
		below := plainImpedance(u, diff(frequencyHz, h)).inverse().squared()
		return diff(above, below)
	}
}

// plainRoot closes in on the sign change of f within two units in the last place of a double; ok tells whether there is
// one, in the direction asked for (from minus to plus when rising).
func plainRoot(f func(*big.Float) *big.Float, frequencyHz float64, rising bool) (root *big.Float, ok bool) {
	ulp := math.Nextafter(frequencyHz, math.Inf(1)) - frequencyHz
	low, high := number(frequencyHz-2*ulp), number(frequencyHz+2*ulp)
	negative := func(x *big.Float) bool { return (f(x).Sign() < 0) == rising }
	if !negative(low) || negative(high) {
		return nil, false
	}
	for range 60 {
		middle := quot(sum(low, high), number(2))
		if negative(middle) {
			low = middle
		} else {
			high = middle
		}
	}
	return low, true
}

// relativeError returns |got/want - 1|.
func relativeError(got float64, want *big.Float) float64 {
	e, _ := diff(quot(number(got), want), number(1)).Float64()
	return math.Abs(e)
}

// ulps returns |got - want| in units in the last place of want.
func ulps(got float64, want *big.Float) float64 {
	w, _ := want.Float64()
	w = math.Abs(w)
	e, _ := diff(number(got), want).Float64()
	return math.Abs(e) / (math.Nextafter(w, math.Inf(1)) - w)
}
