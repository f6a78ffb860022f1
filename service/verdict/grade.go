package verdict

import (
	"math"

	"example.com/admit/service/parttype"
)

// Grade returns the name of the first grade whose limits all hold, or "" when none does. readings[g] stand beside the limits of grade g.
//
// Nested grades are limit sets like any other: each needs the certainty of its decision rule, so that a value in the guard band of the first falls
// to the next. Adjacent grades lie side by side: a border that two of them share is no limit of the part, and a guard band on it would leave a gap
// in which nothing fits; there the value itself decides. Outer borders keep their guard band.
func Grade(grades *parttype.Grades, decision parttype.Decision, readings [][]Reading) string {
	if grades == nil {
		return ""
	}
	for g := range grades.Of {
		fits := true
		for i, limit := range grades.Of[g].Limits {
			r := readings[g][i]
			if !r.HasValue || len(r.SuspendedBy) > 0 {
				fits = false
				break
			}
			if grades.Adjacent {
				outer, inner := borders(grades, g, limit)
				if !within(r.Measured.Value, inner) {
					fits = false
					break
				}
				limit.Bounds = outer
			}
			if limit.Bounds.Min == nil && limit.Bounds.Max == nil {
				continue
			}
			if hold(limit, r, decision).Outcome != Conforms {
				fits = false
				break
			}
		}
		if fits {
			return grades.Of[g].Name
		}
	}
	return ""
}

// borders parts the bounds of a limit of an adjacent grade into those that no other grade shares and those that one does.
func borders(grades *parttype.Grades, g int, limit parttype.Limit) (outer, inner parttype.Bounds) {
	shared := func(bound *float64, opposite func(parttype.Bounds) *float64) bool {
		for o := range grades.Of {
			for _, other := range grades.Of[o].Limits {
				b := opposite(other.Bounds)
				if o != g && other.Quantity == limit.Quantity && other.Of == limit.Of && b != nil && *b == *bound {
					return true
				}
			}
		}
		return false
	}
	if b := limit.Bounds.Min; b != nil {
		if shared(b, func(o parttype.Bounds) *float64 { return o.Max }) {
			inner.Min = b
		} else {
			outer.Min = b
		}
	}
	if b := limit.Bounds.Max; b != nil {
		if shared(b, func(o parttype.Bounds) *float64 { return o.Min }) {
			inner.Max = b
		} else {
			outer.Max = b
		}
	}
	return outer, inner
}

func within(v float64, b parttype.Bounds) bool {
	return !math.IsNaN(v) && (b.Min == nil || v >= *b.Min) && (b.Max == nil || v <= *b.Max)
}
