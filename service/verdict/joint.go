package verdict

import (
	"fmt"
	"math"

	"example.com/admit/service/parttype"
	"example.com/admit/service/uncertainty"
)

// weighJoint holds a limit on an extreme against its readings together. Each of them was weighed by itself; where every one conforms with just
// enough certainty, all of them together may not, and where none is clearly out, it may be certain that one is. The finding nearest to
// its limit then speaks for all. With few readings, or readings that share their errors, the difference is small; it is never ignored.
func weighJoint(g *Joint, ev *Evidence, findings []Finding, decision parttype.Decision) {
	var members []int // of g.Members, those that were judged
	conform, worst := true, -1
	missing := 0.0 // sum of the probabilities of not conforming
	for k, i := range g.Members {
		f := &findings[i]
		if f.Outcome == Suspended || !f.HasValue {
			continue
		}
		members = append(members, k)
		conform = conform && f.Outcome == Conforms
		missing += 1 - f.ConformanceProbability
		if worst < 0 || f.ConformanceProbability < findings[worst].ConformanceProbability {
			worst = i
		}
	}
	if len(members) < 2 || !conform {
		return
	}
	rule, confidence := ruleOf(ev.Limits[worst], decision)
	if rule == parttype.Simple || 1-missing >= confidence {
		return // no single certainty is asked for, or the probabilities alone say that all conform (Bonferroni)
	}
	n := len(g.Members)
	values, lower, upper := make([]float64, len(members)), make([]float64, len(members)), make([]float64, len(members))
	covariance := make([]float64, len(members)*len(members))
	for r, k := range members {
		f := &findings[g.Members[k]]
		values[r], lower[r], upper[r] = f.Measured.Value, math.Inf(-1), math.Inf(1)
		if f.Bounds.Min != nil {
			lower[r] = *f.Bounds.Min
		}
		if f.Bounds.Max != nil {
			upper[r] = *f.Bounds.Max
		}
		for c, l := range members {
			readings := math.Sqrt(float64(f.Readings * findings[g.Members[l]].Readings))
			covariance[r*len(members)+c] = g.Individual[k*n+l]/readings + g.Common[k*n+l]
		}
	}
	p := uncertainty.JointConformance(values, covariance, lower, upper)
	f := &findings[worst]
	outcome := Decide(rule, confidence, f.Measured.Value, f.Bounds, p)
	if outcome == Conforms {
		return
	}
	f.Outcome, f.ConformanceProbability = outcome, p
	f.Text = fmt.Sprintf("%s %s (k = 2), %s: each of %d levels conforms, all of them together with a probability of %s %% only, %s asks for %s %%",
		Label(f.Quantity, f.Where), Format(f.Measured, f.Unit), limitText(f.Bounds, f.Unit), len(members), percent(p), rule, percent(confidence))
}
