// Package crystal is the equivalent circuit of a quartz crystal unit and the quantities that follow from it.
//
// A Unit is a shunt capacitance C0, with a loss conductance G0 beside it, across any number of motional arms (Mode: R1, L1,
// C1 in series), the whole behind a lead inductance Ls:
//
//	        Ls     +--- R1 --- L1 --- C1 ---+        Y(f) = 1 / (j w Ls + 1/Yi)
//	o------mmm-----+--- Rk --- Lk --- Ck ---+---o    Yi   = G0 + j w C0 + sum over k of 1/(Rk + j Xk)
//	               +----- C0 || G0 ---------+        Xk   = w Lk - 1/(w Ck),  w = 2 pi f
//
// Modes[0] is the main mode: characteristic frequencies, load resonance and pulling are its own, on the admittance of the
// whole circuit, so that a neighbouring mode or a lead moves them as it does in a real unit.
//
// Two kinds of answer stand side by side and are told apart by name. Functions called Lossless or FirstOrder are the closed
// forms of data sheets, which know the main mode's C1, C0 and a load capacitance only. All others are roots of the full
// equation with losses, leads and neighbours.
//
// # Numerical care
//
// At a Q of a million the two reactances of an arm agree in twelve digits near resonance, and the difference of their
// doubles is noise. So a Mode stores the motional resonance frequency fs instead of C1, the reactance is formed from the
// factor (f - fs), which subtraction of two doubles gives exactly, and the unknown of every root search is the offset from
// fs, not the frequency. Results that are frequencies are rounded once, at the end.
//
// # What is not here
//
// No measurement, no fixture, no fit, no limit, no temperature: a Unit is plain numbers. Drive level dependence is a
// different Unit at each level. All quantities are in SI base units; capacitance in farad, offsets as fractions (times 1e6
// for ppm). No function allocates, except to describe an invalid argument.
package crystal
