package verdict

import "fmt"

// adviceAfterFail is what an operator does with a unit that failed.
const adviceAfterFail = "Set the unit aside as failed."

// adviceAfterLast is what an operator does with a unit that its last attempt left undecided.
const adviceAfterLast = "Set the unit aside: its attempts are used up and none decided."

// Reasons lists what led to the verdict, most important first: broken limits, then retest causes with their code and further undecided
// limits; for a pass, that all is well.
func (j *Judgement) Reasons() []string {
	var out []string
	seen := map[string]bool{}
	add := func(text, code string) {
		if !seen[text] {
			seen[text] = true
			out = append(out, text+code)
		}
	}
	for _, f := range j.Findings {
		if f.Outcome == Violates {
			add(f.Text, "")
		}
	}
	for _, c := range j.RetestCauses {
		add(c.Text, fmt.Sprintf(" (%s)", c.Cause))
	}
	for _, f := range j.Findings {
		if f.Outcome == Undecided {
			add(f.Text, "")
		}
	}
	if len(out) == 0 && j.Verdict == Pass {
		if len(j.Findings) == 1 {
			add("The limit is met.", "")
		} else {
			add(fmt.Sprintf("All %d limits are met.", len(j.Findings)), "")
		}
	}
	return out
}

// Advice lists what to do next, each once: nothing after a pass.
func (j *Judgement) Advice() []string {
	switch j.Verdict {
	case Pass:
		return nil
	case Fail:
		return []string{adviceAfterFail}
	}
	if j.Disposition == SetAside {
		return []string{adviceAfterLast}
	}
	var out []string
	seen := map[string]bool{}
	for _, c := range j.RetestCauses {
		if c.Advice != "" && !seen[c.Advice] {
			seen[c.Advice] = true
			out = append(out, c.Advice)
		}
	}
	return out
}
