package crystal

import "math"

// circuit is a unit with a capacitance in series with it, one in parallel with the two, or neither; 0 means absent.
//
//	Yt = j w Cp + 1/(j xs + 1/(Y1 + y)),   xs = w Ls - 1/(w Cs)
//
// with Y1 = 1/(R1 + jX) the main arm and y = g + jb all that surrounds it. At a fixed frequency the imaginary part of Yt is
// zero on a circle in the plane of R1 + jX, so the reactances X at which the circuit looks resistive are the two roots of
// one quadratic, whatever the leads, losses and loads. Only its coefficients move with frequency, and slowly.
type circuit struct {
	unit          Unit
	seriesFarad   float64
	parallelFarad float64
}

// quadratic is square X^2 + linear X + constant, which has the sign of the reactance of the whole circuit: positive where
// it is inductive.
type quadratic struct {
	square, linear, constant float64
	margin                   float64 // q below; the roots are real where |q| <= 1/2
}

// zeroPhaseQuadratic returns the coefficients for surroundings y of the main arm at a frequency:
//
//	square   = -b + xs |y|^2 - bp |1 + j xs y|^2           bp = w Cp
//	linear   = 1 - 2 xs b - 2 bp xs (1 - xs b)
//	constant = square R1^2 + xs (1 - bp xs)(1 + 2 g R1)
//
// The discriminant is 1 - 4 q^2 with q = square R1 + g xs (1 - bp xs): the form that does not cancel. For the unit alone
// |q| = w C0 R1 = 1/M, hence the rule M > 2. Derivation ours; TestZeroPhaseAgainstDefinition holds it against the plain
// definition in 300-bit arithmetic.
func (c *circuit) zeroPhaseQuadratic(frequencyHz float64, y complex128) quadratic {
	g, b := real(y), imag(y)
	r := c.unit.Modes[0].ResistanceOhm
	xs := 2 * math.Pi * frequencyHz * c.unit.LeadInductanceHenry
	if c.seriesFarad != 0 {
		xs -= capacitiveReactance(frequencyHz, c.seriesFarad)
	}
	bp := 2 * math.Pi * frequencyHz * c.parallelFarad

	through := 1 - xs*b
	square := -b + xs*(g*g+b*b) - bp*(through*through+xs*xs*g*g)
	offset := xs * (1 - bp*xs)
	return quadratic{
		square:   square,
		linear:   1 - 2*xs*b - 2*bp*xs*through,
		constant: square*r*r + offset*(1+2*g*r),
		margin:   square*r + g*offset,
	}
}

// capacitiveReactance returns 1/(w C) in ohm.
func capacitiveReactance(frequencyHz, capacitanceFarad float64) float64 {
	return 1 / (2 * math.Pi * frequencyHz * capacitanceFarad)
}

// at evaluates the quadratic.
func (q quadratic) at(reactanceOhm float64) float64 {
	return (q.square*reactanceOhm+q.linear)*reactanceOhm + q.constant
}

// discriminant is 1 - 4 margin^2; negative where there is no root.
func (q quadratic) discriminant() float64 {
	return (1 - 2*q.margin) * (1 + 2*q.margin)
}

// root returns the root at which the circuit turns inductive with rising X (rising), or capacitive (not rising). A pair of
// complex roots is answered by its real part. The formula is chosen by the sign of the linear term, so that no root is a
// difference of nearly equal numbers. A root at infinity is infinite.
func (q quadratic) root(rising bool) float64 {
	s := math.Sqrt(math.Max(q.discriminant(), 0))
	if !rising {
		s = -s
	}
	if (q.linear < 0) == (s < 0) && s+q.linear != 0 {
		return -2 * q.constant / (q.linear + s)
	}
	return (s - q.linear) / (2 * q.square)
}

// loneZeroPhase returns the offset of the zero-phase frequency that the main mode has without its neighbours; where it has
// none, the offset at which it comes nearest to one. Infinite or NaN when the root is not at any frequency.
//
// The quadratic is solved at the frequency of its last root until nothing changes. Each step shrinks the error by about
// half the relative distance to fs, 1e-3 or less for quartz; the search that follows does not rely on it.
func (c *circuit) loneZeroPhase(rising bool) (offsetHz float64) {
	m := c.unit.Modes[0]
	const steps = 30
	for range steps {
		frequencyHz := m.ResonanceHz + offsetHz
		q := c.zeroPhaseQuadratic(frequencyHz, c.unit.ShuntAdmittance(frequencyHz))
		next := m.offsetForReactance(q.root(rising))
		if settled := math.Abs(next-offsetHz) <= 4*epsilon*math.Abs(next); settled || !finite(next) {
			return next
		}
		offsetHz = next
	}
	return offsetHz
}

// zeroPhase returns the offset from fs of the zero-phase frequency of the main mode at which the circuit turns inductive
// (rising) or capacitive: the root of the whole circuit nearest to the one the mode would have alone.
func (c *circuit) zeroPhase(rising bool) (offsetHz float64, err error) {
	guess := c.loneZeroPhase(rising)
	if !finite(guess) {
		return 0, ErrNoZeroPhase
	}
	s := search{circuit: c, condition: zeroPhaseCondition}
	offsetHz, ok := s.nearest(guess, rising)
	if !ok {
		return 0, ErrNoZeroPhase
	}
	return offsetHz, nil
}

// extremum returns the offset of the maximum or minimum of the admittance magnitude that belongs to the main mode.
//
// For one mode over a constant susceptance b the extrema are at bX^2 - X - bR^2 = 0; that is where the search for the root
// of the true derivative begins.
func (c *circuit) extremum(maximum bool) (offsetHz float64, err error) {
	m := c.unit.Modes[0]
	b := 2 * math.Pi * m.ResonanceHz * c.unit.ShuntCapacitanceFarad
	bR := b * m.ResistanceOhm
	s := 1 + math.Sqrt(1+4*bR*bR)
	lower, upper := m.offsetForReactance(-2*bR*m.ResistanceOhm/s), m.offsetForReactance(s/(2*b))
	guess := upper
	if maximum {
		guess = lower
	}
	if !finite(guess) {
		return 0, ErrNoExtremum
	}
	find := search{circuit: c, condition: extremumCondition}
	offsetHz, ok := find.nearest(guess, !maximum)
	if !ok {
		return 0, ErrNoExtremum
	}
	return offsetHz, nil
}
