package network

import (
	"fmt"
	"math/cmplx"
	"slices"
)

// coarseNodes bounds the nodes at which influences are kept.
const coarseNodes = 65

// influence is one uncertain value of a calibration with standards.
type influence struct {
	name, group string
	turned      bool // noise: the imaginary part, a quarter turn of the real one
}

// influences lists every uncertain value and reading of the standards, and tells each trace which of them are its own. Sweeps of one
// standard in several bands share its values, not their noise.
func (v *solver) influences() []influence {
	var all []influence
	for _, t := range v.traces {
		for _, value := range t.standard.uncertainValues() {
			n := influence{name: InfluenceStandards, group: v.valueGroup(t, value.name)}
			k := slices.Index(all, n)
			if k < 0 {
				k, all = len(all), append(all, n)
			}
			t.valueInfluences = append(t.valueInfluences, k)
		}
		if t.noise > 0 {
			t.noiseInfluence = len(all)
			group := fmt.Sprintf("%d %s, ", t.place, t.standard.Kind)
			all = append(all, influence{InfluenceNoise, group + "real part", false}, influence{InfluenceNoise, group + "imaginary part", true})
		}
	}
	return all
}

// valueGroup names a value of a standard; where there are several of its kind, by their resistance.
func (v *solver) valueGroup(t *trace, value string) string {
	for _, o := range v.traces {
		if o.standard.Kind == t.standard.Kind && !o.standard.sameValue(t.standard) {
			return fmt.Sprintf("%s %.6g ohm %s", t.standard.Kind, t.standard.ResistanceOhm, value)
		}
	}
	return fmt.Sprintf("%s %s", t.standard.Kind, value)
}

// setChanges solves the segment again at a few nodes, each uncertain value off by its standard uncertainty and each reading off by a little.
func (v *solver) setChanges(g *segment, traces []*trace, influences int) {
	step := (len(g.grid.x) + coarseNodes - 2) / (coarseNodes - 1)
	var x []float64
	for i := 0; i < len(g.grid.x)-1; i += step {
		x = append(x, g.grid.x[i])
	}
	x = append(x, g.grid.x[len(g.grid.x)-1])
	g.coarse = newGrid(x)
	g.changes = make([][]three, influences)
	g.noise = make([]*trace, influences)
	for i, f := range x {
		v.read(traces, f)
		base, _ := v.solveNode(traces, f)
		forth := turn(g.delaySecond, f, g.band.LowHz)
		for m, t := range traces {
			for n, value := range t.standard.uncertainValues() {
				v.changed = append(v.changed[:0], v.readings...)
				for o, other := range traces { // the same standard, read in another sweep, is off as well
					if other.standard.sameValue(t.standard) {
						moved := value.shifted(other.standard)
						v.changed[o].u, v.changed[o].v = moved.ratio(f)
					}
				}
				if terms, ok := v.equations.solve(v.changed, base.c, v.scaleOhm); ok {
					g.setChange(t.valueInfluences[n], i, terms.minus(base), forth)
				}
			}
			if t.noise == 0 {
				continue
			}
			// Terms are analytic in the samples: one step gives the derivative in every direction. It points along the segment's delay, so that
			// it changes slowly over the band.
			size := 1e-4 * abs(base.b/base.c)
			v.changed = append(v.changed[:0], v.readings...)
			v.changed[m].sample += forth * complex(size, 0)
			if terms, ok := v.equations.solve(v.changed, base.c, v.scaleOhm); ok {
				slope := three{}.plus(terms.minus(base), complex(1/size, 0))
				for k := t.noiseInfluence; k < t.noiseInfluence+2; k++ {
					g.noise[k] = t
					g.setChange(k, i, slope, forth)
				}
			}
		}
	}
}

// setChange keeps what influence k changes at coarse node i, A and B without the segment's delay.
func (g *segment) setChange(k, i int, change three, forth complex128) {
	if g.changes[k] == nil {
		g.changes[k] = make([]three, len(g.coarse.x))
	}
	back := cmplx.Conj(forth)
	g.changes[k][i] = three{change.a * back, change.b * back, change.c}
}

// changeAt interpolates a change linearly between the coarse nodes; A and B without the segment's delay.
func (g *segment) changeAt(k int, f float64, hint int) (three, int) {
	cell := g.coarse.cell(f, hint)
	x := g.coarse.x
	share := complex((f-x[cell])/(x[cell+1]-x[cell]), 0)
	low, high := g.changes[k][cell], g.changes[k][cell+1]
	return low.plus(high.minus(low), share), cell
}
