package inspection

import (
	"math"
	"math/cmplx"

	"example.com/admit/service/network"
)

// responseHeight returns the two figures that say how high and how wide a response of resistance R stands in the raw samples of a window:
//
//	|T - To| = gain/(R + Zt),   B = (R + Zt)/(2 pi L)
//
// with Zt what the network shows the unit there; ok is false for samples that are impedances, whose noise is not that of a reading.
func (w *workup) responseHeight(f *fitted) (gain, terminationOhm float64, ok bool) {
	if w.g.solved == nil {
		return 0, 0, false
	}
	var t network.Terms
	low, high := f.sweep.SpanHz()
	if err := w.g.solved.Terms(&t, []float64{(low + high) / 2}, f.sweep.Quantity); err != nil || t.D != 1 {
		return 0, 0, false
	}
	gain = cmplx.Abs(t.B[0] - t.A[0]*t.C[0])
	return gain, math.Max(0, real(t.C[0])), gain > 0 && !math.IsInf(gain, 0)
}
