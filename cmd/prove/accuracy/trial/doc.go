// Package trial repeats a simulated measurement many times and says how the errors are distributed: their standard deviation against the
// least possible one, their mean, and how often the stated interval covers the truth. It knows no crystal.
//
// Repeat runs the trials of one cell of a table on every core, each with random numbers of its own that follow from the seed, the cell and the
// trial alone, so that a table does not depend on how many cores made it. SpreadOf makes the statistics, Gate holds them against
// limits, Report prints tables and gathers what failed.
package trial
