package report

import (
	"fmt"
	"io"
	"strings"

	"example.com/admit/service/verdict"
)

// Order writes on which overtone a unit answers.
func Order(w io.Writer, o *verdict.Order) error {
	p := &printer{w: w}
	p.line("%s", o.Text)
	p.line("\nOrders")
	for _, c := range o.Candidates {
		if c.Probability >= 5e-4 {
			p.line("  %-3d %6.1f %%", c.Order, 100*c.Probability)
		}
	}
	if len(o.Responses) > 1 {
		p.line("\nResponses (± is the expanded uncertainty, k = 2)")
		for _, r := range o.Responses {
			parts := []string{fmt.Sprintf("order %-3d %s", r.Order, verdict.Format(r.FrequencyHz, verdict.UnitHertz))}
			if r.MultipleRatio != nil {
				parts = append(parts, fmt.Sprintf("fn/(n f1) = %.6f", r.MultipleRatio.Value))
			}
			if r.CapacitanceFarad != nil {
				parts = append(parts, "Cn = "+verdict.Format(*r.CapacitanceFarad, verdict.UnitFarad))
			}
			if r.CapacitanceShare != nil {
				parts = append(parts, "n^2 Cn/C1 = "+verdict.Format(*r.CapacitanceShare, verdict.UnitNone))
			}
			p.line("  %s", strings.Join(parts, ", "))
		}
	}
	return p.err
}

// levels writes the drive series.
func (p *printer) levels(j *verdict.Judgement) {
	if len(j.Drive) == 0 {
		return
	}
	p.line("\nDrive series (± is the expanded uncertainty, k = 2)")
	for _, d := range j.Drive {
		p.line("  step %-2d  %-20s  R1 %-22s  fs %s", d.Step, verdict.Format(d.PowerWatt, verdict.UnitWatt),
			verdict.Format(d.MotionalResistanceOhm, verdict.UnitOhm), verdict.Format(d.MotionalResonanceHz, verdict.UnitHertz))
	}
}

// modes writes the modes beside the main one, what could not have been seen, and the overtone order.
func (p *printer) modes(j *verdict.Judgement) {
	if c0 := j.ShuntCapacitanceFarad; c0 != nil {
		p.line("\nShunt capacitance away from all modes: %s (k = 2)", verdict.Format(*c0, verdict.UnitFarad))
	}
	if len(j.Modes) > 0 {
		p.line("\nOther modes (± is the expanded uncertainty, k = 2)")
	}
	for _, m := range j.Modes {
		name := m.Kind
		if m.Order > 0 {
			name = fmt.Sprintf("%s %d", m.Kind, m.Order)
		}
		p.line("  %-12s %s, R %s, suppressed by %s", name, verdict.Format(m.FrequencyHz, verdict.UnitHertz),
			verdict.Format(m.ResistanceOhm, verdict.UnitOhm), verdict.Format(m.SuppressionDB, verdict.UnitDecibel))
	}
	for _, o := range j.Observability {
		p.line("  from %s to %s a mode narrower than %s may have been missed, even if suppressed by less than %s",
			verdict.FormatBound(rounded(o.FromHz), verdict.UnitHertz), verdict.FormatBound(rounded(o.ToHz), verdict.UnitHertz),
			verdict.FormatBound(rounded(o.NarrowestWidthHz), verdict.UnitHertz), verdict.FormatBound(rounded(o.SuppressionDB), verdict.UnitDecibel))
	}
	if j.Order != nil {
		p.line("\nOvertone order\n  %s", j.Order.Text)
	}
}
