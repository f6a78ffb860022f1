package verdict

import (
	"fmt"

	"example.com/admit/service/parttype"
)

// UsesAttempt reports whether the judgement uses up one of the unit's attempts: every one does, save a retest of which the station alone is
// the cause.
func (j *Judgement) UsesAttempt() bool {
	if j.Verdict != Retest || len(j.RetestCauses) == 0 {
		return true
	}
	for _, c := range j.RetestCauses {
		if !c.Station {
			return true
		}
	}
	return false
}

// settle gives the disposition. Attempts are limited: the last one ends in what the part type says, and a unit that used all of them up without
// having passed is not accepted by another.
func (j *Judgement) settle(decision parttype.Decision, used int) {
	most := max(1, decision.Attempts)
	switch {
	case j.Verdict == Fail:
		j.Disposition = Failed
		return
	case j.Verdict == Pass && used < most:
		j.Disposition = Passed
		return
	case j.Verdict == Pass:
		j.Verdict = Retest
		j.RetestCauses = append(j.RetestCauses, NewCause(UndecidedAtLimit, fmt.Sprintf("Every limit is met, but the unit has used up its %s without a decision.", attempts(most))))
	case !j.UsesAttempt() || used+1 < most:
		return
	}
	j.Disposition = SetAside
	ending := "the unit is set aside"
	if decision.AfterLastAttempt == parttype.Fail {
		j.Verdict, j.Disposition = Fail, Failed
		ending = "the unit fails, as the part type asks"
	}
	j.Remarks = append(j.Remarks, fmt.Sprintf("No attempt is left: after %s %s.", attempts(most), ending))
}

func attempts(n int) string {
	if n == 1 {
		return "1 attempt"
	}
	return fmt.Sprintf("%d attempts", n)
}
