package uncertainty

import "math"

// Interval is the closed range Lower ≤ x ≤ Upper. An end of −Inf or +Inf leaves that side open; Lower > Upper is empty.
type Interval struct {
	Lower, Upper float64
}

// Unbounded is every number.
func Unbounded() Interval { return Interval{math.Inf(-1), math.Inf(1)} }

// Around returns value ± half. Half is not negative.
func Around(value, half float64) Interval { return Interval{value - half, value + half} }

// Empty says whether no number is inside. An end that is NaN makes an interval empty.
func (a Interval) Empty() bool { return !(a.Lower <= a.Upper) }

// Contains says whether x is inside, ends included. NaN is nowhere.
func (a Interval) Contains(x float64) bool { return x >= a.Lower && x <= a.Upper }

// Within says whether every number of a is in b. The empty interval is in every other.
func (a Interval) Within(b Interval) bool {
	return a.Empty() || a.Lower >= b.Lower && a.Upper <= b.Upper
}

// Overlaps says whether a and b share a number.
func (a Interval) Overlaps(b Interval) bool { return !a.Intersect(b).Empty() }

// Intersect returns the numbers in both; empty when there is none.
func (a Interval) Intersect(b Interval) Interval {
	return Interval{math.Max(a.Lower, b.Lower), math.Min(a.Upper, b.Upper)}
}

// Hull returns the shortest interval that holds both. An empty one adds nothing.
func (a Interval) Hull(b Interval) Interval {
	switch {
	case a.Empty():
		return b
	case b.Empty():
		return a
	}
	return Interval{math.Min(a.Lower, b.Lower), math.Max(a.Upper, b.Upper)}
}

// Guard returns the interval with each end moved inwards by guard, outwards where guard is negative: the acceptance interval of
// JCGM 106:2012, 8.3, with w = guard. Open ends stay open. Where the guard is wider than the interval the result is empty.
func (a Interval) Guard(guard float64) Interval {
	if math.IsInf(guard, -1) {
		return Unbounded()
	}
	// −Inf + Inf would be NaN: an infinite guard empties what has an end to move.
	if !math.IsInf(a.Lower, 0) {
		a.Lower += guard
	}
	if !math.IsInf(a.Upper, 0) {
		a.Upper -= guard
	}
	return a
}
