package uncertainty_test

import (
	"fmt"
	"math"

	"example.com/admit/service/uncertainty"
)

// A resistance of 57 ohm with two sources of uncertainty, held against a limit of 60 ohm.
func Example() {
	budget := uncertainty.NewBudget(1)
	budget.AddEffect(uncertainty.Noise, uncertainty.Statistical, 20, []float64{0.8})
	budget.AddEffect(uncertainty.Drift, uncertainty.Systematic, math.Inf(1), []float64{0.6})
	u := budget.StandardUncertainty(0)
	expanded, k := uncertainty.Expand(u, budget.EffectiveFreedom(0), 0.95)

	fmt.Printf("57.0 ohm ± %.1f ohm (k = %.2f)\n", expanded, k)
	fmt.Printf("below 60 ohm with probability %.4f\n", uncertainty.Conformance(57, u, math.Inf(-1), 60))
	// Output:
	// 57.0 ohm ± 2.0 ohm (k = 2.01)
	// below 60 ohm with probability 0.9987
}
