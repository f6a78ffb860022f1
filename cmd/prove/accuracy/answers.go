package accuracy

import (
	"fmt"
	"math"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/service/resonance"
)

// answers counts what was answered at all, and which of it was wrong: fs or R1 by more than three of the full standard uncertainties. Of normal
// errors 0.5 % are.
type answers struct{ given, wrong float64 }

func answersOf(outcomes []outcome) (a answers) {
	for _, out := range outcomes {
		if out.state != resonance.Found {
			continue
		}
		a.given++
		f, ohm := out.readings[bound.ResonanceHz], out.readings[bound.ResistanceOhm]
		if !(math.Abs(f.Error) <= 3*f.Deviation && math.Abs(ohm.Error) <= 3*ohm.Deviation) {
			a.wrong++
		}
	}
	return a
}

func (a *answers) add(more answers) {
	a.given += more.given
	a.wrong += more.wrong
}

func (a *answers) wrongPercent() string {
	if a.given == 0 {
		return "-"
	}
	return fmt.Sprintf("%.1f", 100*a.wrong/a.given)
}

// check is the gate of one cell. One percent is the gate of a table; of the few trials of a cell one or two are more than that by chance, and five
// percent are not.
func (a *answers) check(r *trial.Report, name string) {
	if a.wrong > 0.05*a.given+1 {
		r.Fail("%s: %.0f of %.0f answers wrong by more than three standard uncertainties", name, a.wrong, a.given)
	}
}

// checkAll is the gate of a table.
func (a *answers) checkAll(r *trial.Report, name string) {
	if a.wrong > 0.01*a.given+1 {
		r.Fail("%s: %s %% of all answers wrong by more than three standard uncertainties, want 1 %%", name, a.wrongPercent())
	}
}
