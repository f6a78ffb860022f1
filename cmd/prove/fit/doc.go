// Package fit measures how long the fit takes, on one core. Machines differ and are busy with other things, so that what is gated are ratios
// of times taken in one run, each the least of several: to scipy.optimize.least_squares with an analytic derivative on the same samples,
// and to the plain fit from one start. Absolute figures are printed beside them.
package fit
