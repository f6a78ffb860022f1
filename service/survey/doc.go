// Package survey finds every mode that one sweep of a crystal unit shows, fits them all together, and says which modes the sweep could not
// have shown. A unit is any number of motional arms beside one shunt capacitance behind a linear fixture network,
//
//	Y = G0 + j w C0 + sum_k 1/(Rk + jXk),    Xk = 2 pi Lk (f - fk)(f + fk)/f,    T = (A + B Y)/(D + C Y)
//
// and is fitted, as in package resonance, in the domain of the raw samples, where the noise is white. The pedestal j w C0 is part of the model: a
// weak mode is a small circle standing on it, and no peak of a magnitude.
//
// Detection. What the model leaves is searched with the responses of resonators of a bank of widths all over the sweep; what stands out is fitted
// for itself, added to the model, and all modes are fitted again together. A mode stays only if the likelihood of the joint fit gains more
// than
//
//	threshold = 2 ln(tests/false alarm rate)
//
// over the fit without it, tests being the number of templates laid over the sweep. The side lobes of strong modes, which a search by itself
// takes for modes, do not survive the joint fit.
//
// Memory. Where the source stays at a frequency for less than the resonator needs to settle, and keeps its phase, the model follows the
// ringing of all modes from point to point (ring.go, coupled.go).
//
// Observability. From noise, grid and network follows which modes would have been seen (observe.go): narrower ones than the width stated were
// not observable at that suppression.
//
// With an unknown network a free complex amplitude stands in for each mode over a free background with a slope (shape.go): frequencies,
// loaded widths and relative strengths are left, and nothing in ohms.
//
// Samples that are magnitudes are not surveyed. The package judges no limits.
//
// Sources: the law of detection is that of a matched filter in white noise, S. M. Kay, Fundamentals of Statistical Signal Processing, volume 2
// (1998), section 4.3; the equivalent circuit is that of IEC 60122-1. Threshold, bank and joint refit: measured, see the tests.
package survey
