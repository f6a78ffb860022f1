package leastsquares_test

import (
	"fmt"
	"math"

	"example.com/admit/service/leastsquares"
)

// ringDown is an amplitude that dies away, y = a e^(−t/τ), seen at a few times.
type ringDown struct{ second, amplitude []float64 }

func (m ringDown) Evaluate(params, residual, jacobian []float64) {
	a, tau := params[0], params[1]
	n := len(residual)
	for i, t := range m.second {
		e := math.Exp(-t / tau)
		residual[i] = a*e - m.amplitude[i]
		if jacobian != nil {
			jacobian[i] = e
			jacobian[n+i] = a * e * t / (tau * tau)
		}
	}
}

// A fit leaves its solution in the parameters given, and says how sure it is.
func Example() {
	m := ringDown{
		second:    []float64{0, 1e-3, 2e-3, 3e-3, 4e-3},
		amplitude: []float64{1.002, 0.606, 0.367, 0.225, 0.134},
	}
	var workspace leastsquares.Workspace
	params := []float64{1, 1e-3}
	result := workspace.Fit(m, len(m.second), params, leastsquares.Options{})

	covariance := make([]float64, 4)
	workspace.ScaledCovariance(covariance, result.ResidualVariance)
	fmt.Println(result.Status)
	fmt.Printf("tau = (%.3f ± %.3f) ms\n", 1e3*params[1], 1e3*math.Sqrt(covariance[3]))
	// Output:
	// converged
	// tau = (1.996 ± 0.006) ms
}
