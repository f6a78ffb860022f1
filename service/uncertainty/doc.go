// Package uncertainty carries uncertainties through calculations and weighs them against limits. It knows no crystal.
//
// The parts. Propagate and Gradient take a covariance through a function (the law of propagation of JCGM 100, for vectors JCGM
// 102). A Budget keeps what a result's uncertainty is made of, by source, each a covariance matrix over all the quantities that
// share it, so that correlations survive until the end; Mean combines the budgets of repeated attempts, in which only the
// statistical part averages out. NormalProbability, StudentQuantile and their like are the distributions; EffectiveFreedom and
// Expand make a coverage interval of a standard uncertainty. Conformance holds an estimate against limits (JCGM 106).
//
// Conventions. Matrices are flat, row by row. Standard uncertainties are u, never the expanded U. Degrees of freedom are float64,
// +Inf for an uncertainty that is known exactly. NaN answers arguments outside the range of a function, and nothing else.
//
// Not here: global risks of a population (JCGM 106 clause 9), and what a probability means for a verdict.
//
// Sources: JCGM 100:2008 (Guide to the expression of uncertainty in measurement), JCGM 102:2011 (any number of output
// quantities), JCGM 106:2012 (role of uncertainty in conformity assessment).
package uncertainty
