package crystal

import "math"

// PullingSensitivity returns dD/dCL in 1/F, the exact derivative of the exact load resonance offset D = (fL - fs)/fs by the
// load capacitance; negative. Times 1e-6 it is in ppm/pF.
//
// By implicit differentiation of the defining equation at its root:
//
//	series:    dfL/dCL = -(1/(w CL^2)) / (Im Z' + 1/(w f CL))
//	parallel:  dfL/dCL = -w / (Im Y' + 2 pi CL)
//
// with Z' and Y' the analytic derivatives by f of the whole unit. Errors as for LoadResonance.
func (u Unit) PullingSensitivity(loadCapacitanceFarad float64, connection LoadConnection) (perFarad float64, err error) {
	offset, err := u.loadOffset(loadCapacitanceFarad, connection)
	if err != nil {
		return 0, err
	}
	reference := u.Modes[0].ResonanceHz
	frequencyHz := reference + offset
	angular := 2 * math.Pi * frequencyHz
	y, slope := u.responseAtOffset(offset)
	if connection == ParallelLoad {
		return -angular / (imag(slope) + 2*math.Pi*loadCapacitanceFarad) / reference, nil
	}
	z := reciprocal(y)
	reactance := capacitiveReactance(frequencyHz, loadCapacitanceFarad)
	return -(reactance / loadCapacitanceFarad) / (imag(-slope*z*z) + reactance/frequencyHz) / reference, nil
}

// PullingRange returns the fraction (fL(from) - fL(to))/fs by which the exact load resonance frequency falls when the load
// capacitance goes from one value to the other; positive where from < to. Errors as for LoadResonance.
func (u Unit) PullingRange(fromFarad, toFarad float64, connection LoadConnection) (fraction float64, err error) {
	from, err := u.LoadOffset(fromFarad, connection)
	if err != nil {
		return 0, err
	}
	to, err := u.LoadOffset(toFarad, connection)
	if err != nil {
		return 0, err
	}
	return from - to, nil
}

// FirstOrderPullingSensitivity returns the data sheet formula in 1/F,
//
//	dD/dCL ~ -C1/(2 (C0 + CL)^2)
//
// high in magnitude by the factor sqrt(1 + C1/(C0+CL)), 0.1 % for a pull of 1000 ppm, and by what losses do.
// Source: IEC 60122-1.
func (u Unit) FirstOrderPullingSensitivity(loadCapacitanceFarad float64) float64 {
	total := u.ShuntCapacitanceFarad + loadCapacitanceFarad
	return -u.main().CapacitanceFarad() / (2 * total * total)
}

// LosslessPullingSensitivity returns the derivative of the lossless fL/fs by CL in 1/F,
//
//	dD/dCL = -C1/(2 (C0 + CL)^2 sqrt(1 + C1/(C0 + CL)))
func (u Unit) LosslessPullingSensitivity(loadCapacitanceFarad float64) float64 {
	return u.FirstOrderPullingSensitivity(loadCapacitanceFarad) / math.Sqrt(1+u.loadRatio(loadCapacitanceFarad))
}

// FirstOrderPullingRange returns the data sheet formula, as a fraction,
//
//	D(from, to) ~ C1 (to - from)/(2 (C0 + from)(C0 + to))
//
// Source: IEC 60122-1.
func (u Unit) FirstOrderPullingRange(fromFarad, toFarad float64) float64 {
	c0 := u.ShuntCapacitanceFarad
	return u.main().CapacitanceFarad() * (toFarad - fromFarad) / (2 * (c0 + fromFarad) * (c0 + toFarad))
}
