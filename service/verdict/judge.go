package verdict

import (
	"math"
	"strings"

	"example.com/admit/service/parttype"
)

// Reading is what one inspection says of one limit. A reading that rests on a sweep which cannot be trusted names why in SuspendedBy; a value
// known all the same is shown, never judged.
type Reading struct {
	Quantity          parttype.Quantity
	Where             Where
	Unit              string
	Measured          Value
	CommonUncertainty float64 // the part of the standard uncertainty that every reading of the unit shares
	Readings          int     // that Measured is the mean of; 0 is 1
	HasValue          bool
	Unseen            *Unseen // nothing was seen where something was looked for; there is no value then
	SuspendedBy       []Cause
	Note              string // why there is no value, in words, when there is none
}

// Unseen says what would have been seen: a suppression below AtLeast, with the probability given. It conforms with a least suppression up to
// AtLeast, and violates a greatest one below it.
type Unseen struct{ AtLeast, Probability float64 }

// Joint names limits that are one limit on the extreme of several readings, with the covariance of these readings, row by row: its individual
// part, which further readings average out, and the common one.
type Joint struct {
	Members            []int // indices of Evidence.Limits
	Individual, Common []float64
}

// Evidence is everything that Weigh weighs: one reading for every limit in the order of Limits, and the retest causes found.
type Evidence struct {
	Limits   []parttype.Limit
	Readings []Reading // beside Limits, one each
	Causes   []RetestCause
	Joint    []Joint
	Past     []Past // of earlier attempts

	AttemptsUsed int  // by earlier inspections of the unit
	Uncounted    bool // the inspection is none of production: it disposes of nothing, and attempts are not limited
	// Condemned: earlier attempts prove the unit bad whatever this one reads; the text says why. Empty: they do not.
	Condemned string
}

// Weigh holds every limit against the mean of its valid readings and gives the verdict by the rules of precedence: a limit clearly broken on a
// valid sweep is a fail; otherwise any suspended or undecided limit is a retest; else pass. A retest cause that suspends no limit still
// forbids a pass: what it says of the measurement holds for the unit. Then the attempts are counted. The other fields of the Judgement
// are the caller's.
func Weigh(decision parttype.Decision, ev Evidence) Judgement {
	j := Judgement{RetestCauses: append([]RetestCause(nil), ev.Causes...)}
	var vague []string
	for i, limit := range ev.Limits {
		f, sharp := weighOne(limit, ev.Readings[i], ev.Past, decision)
		if !sharp {
			vague = append(vague, Label(limit.Quantity, f.Where))
		}
		j.Findings = append(j.Findings, f)
	}
	for k := range ev.Joint {
		weighJoint(&ev.Joint[k], &ev, j.Findings, decision)
	}
	broken, open := ev.Condemned != "", len(ev.Limits) == 0
	var undecided []string
	for i := range j.Findings {
		switch f := &j.Findings[i]; f.Outcome {
		case Violates:
			broken = true
		case Undecided:
			open = true
			undecided = append(undecided, f.Text)
		case Suspended:
			open = true
		}
	}
	if ev.Condemned != "" && !named(j.RetestCauses, HighResistanceAtLowDrive) {
		j.RetestCauses = append(j.RetestCauses, NewCause(HighResistanceAtLowDrive, ev.Condemned))
	}
	if len(vague) > 0 && !named(j.RetestCauses, TooNoisy) {
		j.RetestCauses = append(j.RetestCauses, NewCause(TooNoisy, "Too uncertain to be held against its limit: "+strings.Join(vague, ", ")+"."))
	}
	if len(undecided) > 0 {
		j.RetestCauses = append(j.RetestCauses, NewCause(UndecidedAtLimit, undecided[0]))
	}
	switch {
	case broken:
		j.Verdict = Fail
	case open || len(j.RetestCauses) > 0:
		j.Verdict = Retest
	default:
		j.Verdict = Pass
	}
	if !ev.Uncounted {
		j.settle(decision, ev.AttemptsUsed)
	}
	return j
}

// Hold weighs one limit as Weigh does, by itself: to know before the whole is weighed whether a limit is broken.
func Hold(limit parttype.Limit, r Reading, past []Past, decision parttype.Decision) Finding {
	f, _ := weighOne(limit, r, past, decision)
	return f
}

// weighOne takes the mean with earlier readings and weighs it. sharp is false when the reading is too vague to be held against the limit.
func weighOne(limit parttype.Limit, r Reading, past []Past, decision parttype.Decision) (f Finding, sharp bool) {
	judged := len(r.SuspendedBy) == 0 && r.HasValue
	if judged && !sharpEnough(r.Measured, limit, decision) {
		r.SuspendedBy = []Cause{TooNoisy}
		r.Note = "its uncertainty leaves too little of the tolerance to decide anything"
		return hold(limit, r, decision), false
	}
	if judged {
		for i := range past {
			if p := &past[i]; p.Quantity == r.Quantity && p.Where == r.Where {
				r = r.With(*p)
				break
			}
		}
	}
	return hold(limit, r, decision), true
}

// hold weighs one limit.
func hold(limit parttype.Limit, r Reading, decision parttype.Decision) Finding {
	f := Finding{Quantity: limit.Quantity, Where: r.Where, Unit: r.Unit, Bounds: limit.Bounds}
	rule, confidence := ruleOf(limit, decision)
	if r.Unseen != nil && len(r.SuspendedBy) == 0 {
		return holdUnseen(f, r, rule)
	}
	usable := r.HasValue && finite(r.Measured.Value) && finite(r.Measured.StandardUncertainty) && r.Measured.StandardUncertainty >= 0
	if usable {
		f.Measured, f.HasValue = r.Measured, true
		f.CommonUncertainty, f.Readings = r.CommonUncertainty, max(1, r.Readings)
	}
	if len(r.SuspendedBy) > 0 || !usable {
		f.Outcome = Suspended
		f.Text = suspendedText(f, r)
		return f
	}
	f.ConformanceProbability = Conformance(r.Measured, limit.Bounds)
	f.Outcome = Decide(rule, confidence, r.Measured.Value, limit.Bounds, f.ConformanceProbability)
	f.Text = findingText(f, rule, confidence)
	return f
}

// holdUnseen weighs a suppression of which only a lower bound is known.
func holdUnseen(f Finding, r Reading, rule parttype.Rule) Finding {
	f.ConformanceProbability = r.Unseen.Probability
	switch b := f.Bounds; {
	case b.Max != nil && r.Unseen.AtLeast > *b.Max:
		f.Outcome, f.ConformanceProbability = Violates, 1-r.Unseen.Probability
	case b.Max == nil && b.Min != nil && r.Unseen.AtLeast >= *b.Min:
		f.Outcome = Conforms
	default:
		f.Outcome = Undecided
	}
	f.Text = unseenText(f, r.Unseen, rule)
	return f
}

func named(causes []RetestCause, c Cause) bool {
	for _, k := range causes {
		if k.Cause == c {
			return true
		}
	}
	return false
}

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }
