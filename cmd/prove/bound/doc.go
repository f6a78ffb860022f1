// Package bound computes the least standard deviations that any unbiased estimator can have: the Cramer-Rao bound, from the Fisher matrix
// of the samples' own distribution. It is what the fit is measured against, and shares nothing with it: it has a forward model of its own,
// written in natural frequencies and partial fractions, takes derivatives by differences, and of the service it imports the equivalent
// circuit only.
//
// Of is for a sweep of a crystal unit in a linear fixture network, settled or stepped so fast that the resonator still rings, complex or
// magnitude-only. Besides the deviations a Bound gives Errors: what an efficient estimator would be off by for given noise, to first
// order. Its variance is exactly the bound, so that a simulation can use it as a control variate.
//
// Pole is for a single resonance of unknown complex amplitude over an unknown background, and Glide is the response of a resonator to a source that
// moves at a constant rate; both hold published figures.
//
// Sources: H. Cramer, Mathematical Methods of Statistics (1946), chapter 32; C. R. Rao, Bull. Calcutta Math. Soc. 37 (1945) 81.
package bound
