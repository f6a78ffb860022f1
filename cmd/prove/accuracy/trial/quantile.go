package trial

import (
	"math"
	"slices"
)

// Quantile returns the value that a share of the values lies below, the nearest one of them; NaN of none. values is reordered.
func Quantile(values []float64, share float64) float64 {
	if len(values) == 0 {
		return math.NaN()
	}
	slices.Sort(values)
	k := int(math.Round(share * float64(len(values)-1)))
	return values[min(max(k, 0), len(values)-1)]
}
