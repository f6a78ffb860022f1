package inspection

import (
	"context"
	"math"

	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// jump is a change of R1 in the middle of the main sweep.
type jump struct {
	point       int
	ohm, change float64 // R1 before, and by how much it moved
	allowed     float64
}

// lookForJump looks, where the main sweep is no unit's, whether it is that of a unit whose contact changed on the way: cut at one point, both pieces
// are of one resonance at one frequency, with two resistances. The piece before the cut and the one behind it are fitted by themselves, at a few
// cuts; a second mode, or a bent trace, does not fall into two such pieces.
func (w *workup) lookForJump(ctx context.Context, b *bench, start resonance.Expected) error {
	main := w.fits[w.main]
	if main.est.State != resonance.Misfit || !w.g.scale || main.sweep.Timing.Phase == sweep.PhaseRestarted {
		return nil
	}
	n := main.sweep.Points()
	for eighth := 2; eighth <= 6; eighth++ {
		if err := ctx.Err(); err != nil {
			return err
		}
		cut := n * eighth / 8
		before, err := b.fitPiece(w.c, w.main, 0, cut, start, w.g)
		if err != nil {
			return err
		}
		behind, err := b.fitPiece(w.c, w.main, cut, n, start, w.g)
		if err != nil {
			return err
		}
		if j := w.jumpBetween(before, behind); j != nil && (w.jump == nil || math.Abs(j.change) > math.Abs(w.jump.change)) {
			j.point = cut
			w.jump = j
		}
	}
	return nil
}

// fitPiece fits the points from..to of a sweep.
func (b *bench) fitPiece(c *Case, index, from, to int, start resonance.Expected, g *gate) (*fitted, error) {
	piece := c.Sweeps[index]
	piece.Grid = nil
	piece.Timing.Dwell, piece.Timing.Averaging, piece.Timing.LeadIn = 0, 0, 0 // the second piece does not begin at rest
	piece.FrequencyHz, piece.Re = piece.FrequencyHz[from:to], piece.Re[from:to]
	if piece.Im != nil {
		piece.Im = piece.Im[from:to]
	}
	part := *c
	part.Sweeps = []sweep.Sweep{piece}
	return b.fit(&part, 0, start, g)
}

// jumpBetween returns the change of R1 between two pieces; nil where they are not two pieces of one unit, or do not differ.
func (w *workup) jumpBetween(before, behind *fitted) *jump {
	if !before.sound() || !behind.sound() {
		return nil
	}
	shift, ok1 := frequencyShift(before, behind)
	change, ok2 := resistanceChange(before, behind)
	if !ok1 || !ok2 {
		return nil
	}
	ppm, _, ok1 := shift.measured()
	ohm, _, ok2 := change.measured()
	width := before.est.Quality.LoadedBandwidthHz / before.est.Value[resonance.ResonanceHz] * 1e6
	if !ok1 || !ok2 || math.Abs(ppm.Value) > repeatFactor*ppm.StandardUncertainty+0.05*width {
		return nil
	}
	j := &jump{ohm: math.Exp(before.est.Value[resonance.LogResistance]), change: ohm.Value, allowed: w.contactAllows(ohm)}
	if math.Abs(j.change) <= j.allowed {
		return nil
	}
	return j
}
