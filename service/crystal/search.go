package crystal

import "math"

// epsilon is the distance from 1 to the next double.
const epsilon = 0x1p-52

// condition is a function of the offset from fs whose change of sign is looked for.
type condition int

const (
	zeroPhaseCondition condition = iota // the sign of the circuit's reactance
	extremumCondition                   // half the derivative of |Y|^2
)

// search looks for the sign change of a condition that is nearest to a first guess.
//
// With neighbours there may be many: each mode brings a pair of zero-phase frequencies of its own. The search walks from
// the guess both ways, in steps that shrink towards each mode to a fraction of its bandwidth, so that it passes a neighbour
// a million times narrower than the window in some hundred steps and does not step over it.
type search struct {
	circuit   *circuit
	condition condition
}

const (
	// An eighth of the distance to the nearest feature, its half width added: the functions searched are rational with
	// their poles at a half width beside the feature, so that between two such points they bend little.
	stepFraction = 0.125

	// The window: a neighbour strong enough to move a root further than this has taken it over.
	windowInOffsets    = 2.0
	windowInHalfWidths = 4.0
)

// nearest returns the offset of the sign change, from minus to plus (rising) or from plus to minus, that is nearest to the
// guess, lies inside the window and belongs to the main mode. It is exact to a few units in the last place of the offset.
func (s *search) nearest(guessHz float64, rising bool) (offsetHz float64, ok bool) {
	m := s.circuit.unit.Modes[0]
	window := windowInOffsets*math.Abs(guessHz) + windowInHalfWidths*m.halfWidthHz()
	// The frequency stays positive.
	window = math.Min(window, guessHz+m.ResonanceHz*(1-1.0/64))
	if !positiveFinite(window) {
		return 0, false
	}
	start := s.sample(guessHz)
	if start.value == 0 {
		// Landed on it by luck; a step aside makes an ordinary bracket of it.
		start = s.sample(guessHz + s.smallest(guessHz))
	}
	above, okAbove := s.walk(start, window, 1, rising)
	if okAbove {
		window = math.Min(window, math.Abs(above-start.offsetHz))
	}
	// No further down than the root found above, if one was: what is found below is nearer.
	if below, ok := s.walk(start, window, -1, rising); ok {
		return below, true
	}
	return above, okAbove
}

// walk goes from the guess in one direction (+1 up, -1 down) and returns the first sign change of the wanted kind that
// belongs to the main mode.
//
// Two sign changes inside one step leave no trace in the signs, but they bend the condition towards zero: where three
// neighbouring values of one sign have the least magnitude in the middle, the dip is looked into.
func (s *search) walk(start sample, window, direction float64, rising bool) (offsetHz float64, ok bool) {
	end := start.offsetHz + direction*window
	// Upwards a rising change begins negative; downwards it begins positive.
	beginsNegative := rising == (direction > 0)
	// One sample behind the start, so that a dip at the start itself is seen.
	before := s.sample(start.offsetHz - direction*s.step(start.offsetHz))
	for at := start; at.offsetHz != end; {
		next := s.sample(s.onward(at.offsetHz, end, direction))
		left, right, bracketed := at, next, at.negative() != next.negative() && finite(at.value) && finite(next.value)
		if !bracketed && before.negative() == at.negative() && at.dipsBetween(before, next) {
			var bottom sample
			if bottom, bracketed = s.dip(before, next); bracketed {
				left, right = before, bottom
				if before.negative() != beginsNegative {
					left, right = bottom, next
				}
			}
		}
		if bracketed && left.negative() == beginsNegative {
			root := s.refine(left, right)
			if finite(root) && s.circuit.unit.mainTakesPart(root) {
				return root, true
			}
		}
		before, at = at, next
	}
	return 0, false
}

// sample is one value of the condition.
type sample struct{ offsetHz, value float64 }

func (p sample) negative() bool { return p.value < 0 }

// dipsBetween says whether p is nearer to zero than both its neighbours.
func (p sample) dipsBetween(a, b sample) bool {
	return math.Abs(p.value) < math.Abs(a.value) && math.Abs(p.value) <= math.Abs(b.value)
}

func (s *search) sample(offsetHz float64) sample { return sample{offsetHz, s.value(offsetHz)} }

// onward returns the next offset of a walk, the end at last.
func (s *search) onward(atHz, endHz, direction float64) float64 {
	next := atHz + direction*s.step(atHz)
	if (next-endHz)*direction >= 0 || next == atHz {
		return endHz
	}
	return next
}

// dip looks for a value of the other sign between two samples of one sign with a smaller magnitude between them. It narrows
// the least magnitude by golden section down to a millionth of the interval, beyond which a pair of roots is one of rounding.
func (s *search) dip(a, b sample) (bottom sample, ok bool) {
	const golden, steps = 0.3819660112501051, 30
	low, high := s.between(a, b, golden), s.between(a, b, 1-golden)
	for range steps {
		switch {
		case low.negative() != a.negative():
			return low, true
		case high.negative() != a.negative():
			return high, true
		case math.Abs(low.value) < math.Abs(high.value):
			b, high = high, low
			low = s.between(a, b, golden)
		default:
			a, low = low, high
			high = s.between(a, b, 1-golden)
		}
	}
	return sample{}, false
}

// between samples the condition at a fraction of the way from a to b.
func (s *search) between(a, b sample, fraction float64) sample {
	return s.sample(a.offsetHz + fraction*(b.offsetHz-a.offsetHz))
}

// step returns how far the search may go from an offset.
func (s *search) step(offsetHz float64) float64 {
	unit := &s.circuit.unit
	reference := unit.Modes[0].ResonanceHz
	free := math.Inf(1)
	for k := range unit.Modes {
		m := &unit.Modes[k]
		free = math.Min(free, math.Abs((reference-m.ResonanceHz)+offsetHz)+m.halfWidthHz())
	}
	return math.Max(stepFraction*free, s.smallest(offsetHz))
}

// smallest is the least step that makes sense: far below the bandwidth and above the rounding of the offset.
func (s *search) smallest(offsetHz float64) float64 {
	return math.Max(1e-4*s.circuit.unit.Modes[0].halfWidthHz(), 64*epsilon*math.Abs(offsetHz))
}

// value is the condition at an offset.
func (s *search) value(offsetHz float64) float64 {
	unit := &s.circuit.unit
	if s.condition == extremumCondition {
		y, slope := unit.responseAtOffset(offsetHz)
		return real(y)*real(slope) + imag(y)*imag(slope)
	}
	m := &unit.Modes[0]
	frequencyHz := m.ResonanceHz + offsetHz
	q := s.circuit.zeroPhaseQuadratic(frequencyHz, unit.restAtOffset(offsetHz))
	return q.at(m.reactance(frequencyHz, offsetHz))
}

// refine closes a bracket around a sign change, its ends in either order, down to the rounding of the offset. It draws
// secants weighted so that neither end gets stuck (Anderson and Bjorck, BIT 13, 1973), and halves the bracket instead
// whenever three secants have not, which bounds the work whatever the function.
func (s *search) refine(a, b sample) float64 {
	tiny := 1e-3 * epsilon * s.circuit.unit.Modes[0].halfWidthHz()
	const limit = 400 // a halving in four evaluations at least: 100 of them
	reference, secants := math.Abs(b.offsetHz-a.offsetHz), 0
	for range limit {
		tolerance := 2*epsilon*math.Abs(b.offsetHz) + tiny
		span := b.offsetHz - a.offsetHz
		width := math.Abs(span)
		if b.value == 0 || width <= tolerance {
			break
		}
		if width <= reference/2 {
			reference, secants = width, 0
		}
		next := b.offsetHz - b.value*(span/(b.value-a.value))
		if secants++; secants > 3 || !finite(next) {
			next = a.offsetHz + span/2
			reference, secants = width, 0
		}
		// A point within the tolerance of an end is moved inwards, so that the other end follows.
		if math.Abs(next-b.offsetHz) < tolerance {
			next = b.offsetHz - math.Copysign(tolerance/2, span)
		}
		if math.Abs(next-a.offsetHz) < tolerance {
			next = a.offsetHz + math.Copysign(tolerance/2, span)
		}
		p := s.sample(next)
		if p.negative() != b.negative() {
			a = b
		} else if weight := 1 - p.value/b.value; weight > 0 {
			a.value *= weight
		} else {
			a.value /= 2
		}
		b = p
	}
	return b.offsetHz
}
