package verdict

import (
	"fmt"
	"testing"
)

// TestReasonsAndAdvice: what decided comes first, each once, and what is not to be acted on stays out.
func TestReasonsAndAdvice(t *testing.T) {
	findings := []Finding{
		{Text: "R1 conforms.", Outcome: Conforms}, {Text: "fL undecided.", Outcome: Undecided},
		{Text: "R1 violates.", Outcome: Violates}, {Text: "C0 suspended.", Outcome: Suspended},
	}
	causes := []RetestCause{{Cause: TooNoisy, Text: "Noisy.", Advice: "Clean."}, {Cause: ReferenceUnlocked, Text: "Unlocked.", Advice: "Lock."}, {Cause: TooNoisy, Text: "Noisy.", Advice: "Clean."}}
	for _, c := range []struct {
		j               Judgement
		reasons, advice string
	}{
		{Judgement{Verdict: Pass, Findings: findings[:1]}, "[The limit is met.]", "[]"},
		{Judgement{Verdict: Fail, Findings: findings}, "[R1 violates. fL undecided.]", "[Set the unit aside as failed.]"},
		{Judgement{Verdict: Retest, Findings: findings[:2], RetestCauses: causes}, "[Noisy. (too_noisy) Unlocked. (reference_unlocked) fL undecided.]", "[Clean. Lock.]"},
	} {
		if got := fmt.Sprint(c.j.Reasons()); got != c.reasons {
			t.Errorf("%s: reasons %s, want %s", c.j.Verdict, got, c.reasons)
		}
		if got := fmt.Sprint(c.j.Advice()); got != c.advice {
			t.Errorf("%s: advice %s, want %s", c.j.Verdict, got, c.advice)
		}
	}
}
