// Package network knows the circuit between receiver and crystal unit. Whatever linear circuit that is, it maps the admittance Y of the
// unit to the raw sample by a bilinear function with at most three complex terms at each frequency:
//
//	T(Y) = (A + B Y)/(D + C Y)
//
// with D = 1, A the sample of an open, B/C the sample of a short and C the impedance that the network shows the unit, in ohm. Samples
// that are admittances (B = 1, A = C = 0) and impedances (A = 1, C = 1, B = D = 0) fit the same form. The package solves the terms from
// three or more known standards, proves them with a check standard, gives nominal terms where no calibration is asked for, and turns
// source power into the power in R1. It fits no resonance.
//
// Solve turns a Calibration into a Solved, which gives Terms and Contributions at the frequencies of any sweep, from standards or from the
// nominal network alike. What cannot fit together (standards that contradict each other, a sweep outside the calibrated band) is a
// MismatchError: a finding about the station, never about the unit.
package network

// Terms are the bilinear terms of one network at the frequencies of one sweep, in measuring order. All slices have one length.
type Terms struct {
	FrequencyHz []float64
	A, B, C     []complex128
	D           float64 // 1, or 0 where the sample is an impedance
}

// Sample returns T(Y) at point i; y in siemens.
func (t *Terms) Sample(i int, y complex128) complex128 {
	return (t.A[i] + t.B[i]*y) / (complex(t.D, 0) + t.C[i]*y)
}

// Admittance returns the Y in siemens that gives the sample at point i.
func (t *Terms) Admittance(i int, sample complex128) complex128 {
	return (complex(t.D, 0)*sample - t.A[i]) / (t.B[i] - t.C[i]*sample)
}

// Contribution is one systematic influence on the terms: what they would be if that influence were off by one standard uncertainty.
// Contributions of one name and Group are common to all sweeps of an inspection and to all attempts under one calibration.
type Contribution struct {
	Name  string // one of the Influence names
	Group string // which one of that name, e.g. "load resistance" or "short inductance"; "" where there is only one
	Terms Terms

	influence int // of those of a Solved, while the terms are being made
}

// slope returns dY/dT at point i: how far the admittance moves with the sample.
//
//	dY/dT = (D B - A C)/(B - C T)^2
func (t *Terms) slope(i int, sample complex128) complex128 {
	divisor := t.B[i] - t.C[i]*sample
	return (complex(t.D, 0)*t.B[i] - t.A[i]*t.C[i]) / (divisor * divisor)
}

// setFrequencies makes room for as many points, reusing what is there, and copies the frequencies: the caller may reuse its own buffer.
func (t *Terms) setFrequencies(frequencyHz []float64) {
	n := len(frequencyHz)
	t.FrequencyHz = append(t.FrequencyHz[:0], frequencyHz...)
	t.A = resized(t.A, n)
	t.B = resized(t.B, n)
	t.C = resized(t.C, n)
}

func resized(buffer []complex128, n int) []complex128 {
	if cap(buffer) < n {
		return make([]complex128, n)
	}
	return buffer[:n]
}

// setConstant makes every point the same: the terms of a network that does not depend on frequency.
func (t *Terms) setConstant(c constantTerms) {
	t.D = c.d
	for i := range t.A {
		t.A[i], t.B[i], t.C[i] = c.a, c.b, c.c
	}
}
