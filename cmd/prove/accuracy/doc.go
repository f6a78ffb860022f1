// Package accuracy measures how exact the fit is and how honest its uncertainties are, against a bound (cmd/prove/bound) and a physics
// (fixtures/simulated) that share nothing with it. Its tests are the quick form; Run prints the full form, 10 000 trials a cell, as tables.
//
// Each proof is a function that measures the cells of its tables, prints them to a report and notes there what breaks a gate:
//
//	Efficiency     settled sweeps, complex and magnitude-only: standard deviation over the bound, bias, coverage
//	Lost           noise as strong as half the response, and wild points: no fit may end anywhere else
//	Fast           sweeps that outrun the resonator, timing stated; what a plain fit makes of them; the time saved
//	Unstated       the same, timing not stated
//	Settling       sweeps at the border of settled, sources that start anew at each step
//	Measured       real sweeps of that kind
//	Drift, Named   drift of the station since its calibration and within a sweep
//	Robust         windows, units and numbers of points out of the ordinary; an unwanted mode nearby
//	SecondOpinion  scipy on the same samples
//
// Three gates are not met yet, and these proofs stand in Run alone until they are: FarOut (points wild by five times the response spoil three
// fits in ten), Unstated (fs of a sweep of which half the dwell was averaged, at dwells of two time constants; Q holds), and Drift (where a
// free phase takes the drift up, the interval of fs keeps the stated drift and is four times too wide).
//
// Random numbers follow from a seed, which is printed. Statistics use the error of an efficient estimator for the same noise as control variate
// (package trial), which makes a thousand trials sharp enough that no seed breaks a gate by chance.
package accuracy
