package network

import (
	"math"
	"math/cmplx"
	"sort"
)

// grid interpolates between ascending frequencies by the cubic through the four nodes around a frequency (fewer where there are
// fewer). At a node it gives the node's value exactly. The products of node distances are kept, so that a look-up divides nothing.
type grid struct {
	x       []float64
	inverse [][4]float64 // of the group of nodes that begins at i: 1 over the product of a node's distances to the others
	width   int          // nodes in a group: 2 to 4
}

func newGrid(x []float64) grid {
	g := grid{x: x, width: min(4, len(x))}
	groups := len(x) - g.width + 1
	g.inverse = make([][4]float64, groups)
	for i := range g.inverse {
		for k := range g.width {
			product := 1.0
			for m := range g.width {
				if m != k {
					product *= x[i+k] - x[i+m]
				}
			}
			g.inverse[i][k] = 1 / product
		}
	}
	return g
}

// cell returns the i with x[i] <= f < x[i+1], the outermost cells reaching out; hint is where to look first.
func (g *grid) cell(f float64, hint int) int {
	last := len(g.x) - 2
	hint = min(max(hint, 0), last)
	for near := max(hint-1, 0); near <= min(hint+1, last); near++ {
		if g.x[near] <= f && f < g.x[near+1] {
			return near
		}
	}
	return min(max(sort.SearchFloat64s(g.x, f), 1)-1, last)
}

// weights returns the first node of the group around a cell and the weight of each of its nodes; unused weights are 0.
func (g *grid) weights(f float64, cell int) (first int, w [4]float64) {
	first = min(max(cell-1, 0), len(g.x)-g.width)
	inverse := &g.inverse[first]
	if g.width == 4 {
		x := g.x[first : first+4 : first+4]
		d0, d1, d2, d3 := f-x[0], f-x[1], f-x[2], f-x[3]
		low, high := d0*d1, d2*d3
		return first, [4]float64{d1 * high * inverse[0], d0 * high * inverse[1], low * d3 * inverse[2], low * d2 * inverse[3]}
	}
	for k := range g.width {
		product := inverse[k]
		for m := range g.width {
			if m != k {
				product *= f - g.x[first+m]
			}
		}
		w[k] = product
	}
	return first, w
}

// apply sums node values with the weights of a group.
func (g *grid) apply(values []complex128, first int, w *[4]float64) complex128 {
	if g.width == 4 {
		v := values[first : first+4 : first+4]
		return complex(
			w[0]*real(v[0])+w[1]*real(v[1])+w[2]*real(v[2])+w[3]*real(v[3]),
			w[0]*imag(v[0])+w[1]*imag(v[1])+w[2]*imag(v[2])+w[3]*imag(v[3]))
	}
	var sum complex128
	for k := range g.width {
		sum += complex(w[k], 0) * values[first+k]
	}
	return sum
}

// meanDelay returns the delay in seconds that turns values by exp(-j w delay) on the average: the slope of their unwrapped phase, each
// weighted with its power. Cables turn samples many times within a band, and no low polynomial follows that; what is left after taking
// the delay out is smooth. Steps of more than half a turn between neighbours are ambiguous.
func meanDelay(x []float64, values []complex128) float64 {
	var weights, meanX, meanPhase, spread, joint, phase float64
	for i := range x {
		if i > 0 {
			phase += cmplx.Phase(values[i] * cmplx.Conj(values[i-1]))
		}
		w := square(values[i])
		if w == 0 {
			continue
		}
		// Means and sums of products are updated together, which loses nothing at a narrow band far from zero.
		weights += w
		dx, dp := x[i]-meanX, phase-meanPhase
		meanX += dx * w / weights
		meanPhase += dp * w / weights
		spread += w * dx * (x[i] - meanX)
		joint += w * dx * (phase - meanPhase)
	}
	if !(spread > 0) {
		return 0
	}
	return -joint / (2 * math.Pi * spread)
}

// turn returns exp(-j 2 pi delay (f - reference)).
func turn(delaySecond, frequencyHz, referenceHz float64) complex128 {
	sin, cos := math.Sincos(-2 * math.Pi * delaySecond * (frequencyHz - referenceHz))
	return complex(cos, sin)
}
