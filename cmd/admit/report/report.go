// Package report writes an inspection as plain text for a person at a terminal: the verdict, why, what to do next, every limit with its
// reading, and the motional parameters with their uncertainty.
package report

import (
	"fmt"
	"io"
	"math"
	"strings"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
)

// words of the verdicts and outcomes, as a person reads them.
var (
	verdictWords = map[verdict.Verdict]string{verdict.Pass: "PASS", verdict.Fail: "FAIL", verdict.Retest: "RETEST"}
	outcomeWords = map[verdict.Outcome]string{verdict.Conforms: "met", verdict.Violates: "BROKEN", verdict.Undecided: "undecided", verdict.Suspended: "not judged"}
)

// Record writes a record, judged or stored.
func Record(w io.Writer, r *inspection.Record) error {
	p := &printer{w: w}
	j := &r.Judgement
	p.line("%s  %s", verdictWords[j.Verdict], heading(r))
	p.line("        %s", context(r))
	if j.Grade != "" {
		p.line("        grade %s", j.Grade)
	}
	if j.Disposition == verdict.SetAside {
		p.line("        set aside: no attempt is left")
	}
	p.section("Why", j.Reasons())
	p.section("Next", j.Advice())
	if len(j.Findings) > 0 {
		p.line("\nLimits")
		for _, f := range j.Findings {
			p.line("  %-10s  %s", outcomeWords[f.Outcome], f.Text)
		}
	}
	p.parameters(j)
	p.levels(j)
	p.modes(j)
	p.budget(j)
	p.section("Remarks", j.Remarks)
	return p.err
}

// heading names the unit and the part type.
func heading(r *inspection.Record) string {
	b := &r.Begin
	unit := b.Unit.Name()
	if b.Unit.Serial != "" && b.Unit.Lot != "" {
		unit += ", lot " + string(b.Unit.Lot)
	}
	text := fmt.Sprintf("%s  %s version %d", unit, r.PartType.Name, r.PartType.Version)
	if b.Purpose != inspection.Production {
		text += fmt.Sprintf("  (%s)", b.Purpose)
	}
	return text
}

// context says where, when and under which calibration, and where the record stands.
func context(r *inspection.Record) string {
	b := &r.Begin
	parts := []string{"station " + string(b.Station), "contact head " + string(b.ContactHead), "measured " + b.MeasuredAt.UTC().Format(time.RFC3339)}
	if b.Calibration != "" {
		parts = append(parts, "calibration "+string(b.Calibration))
	} else {
		parts = append(parts, "no calibration")
	}
	if r.Sequence != 0 {
		parts = append(parts, fmt.Sprintf("attempt %d", r.Attempt), fmt.Sprintf("recorded as number %d, inspection %s", r.Sequence, b.ID))
	}
	return strings.Join(parts, ", ")
}

// printer writes lines and keeps the first error.
type printer struct {
	w   io.Writer
	err error
}

func (p *printer) line(format string, args ...any) {
	if p.err == nil {
		_, p.err = fmt.Fprintf(p.w, format+"\n", args...)
	}
}

func (p *printer) section(title string, lines []string) {
	if len(lines) == 0 {
		return
	}
	p.line("\n%s", title)
	for _, l := range lines {
		p.line("  %s", l)
	}
}

// parameters writes the motional parameters and what follows from them; ± is the expanded uncertainty.
func (p *printer) parameters(j *verdict.Judgement) {
	m := j.Main
	if m == nil {
		return
	}
	p.line("\nMain mode (± is the expanded uncertainty, k = 2)")
	row := func(name, symbol string, v verdict.Value, unit string) {
		p.line("  %-30s %-4s %s", name, symbol, verdict.Format(v, unit))
	}
	optional := func(name, symbol string, v *verdict.Value, unit string) {
		if v != nil {
			row(name, symbol, *v, unit)
		}
	}
	row("motional resonance frequency", "fs", m.MotionalResonanceHz, verdict.UnitHertz)
	row("quality factor", "Q", m.QualityFactor, verdict.UnitNone)
	if j.ScaleUnknown {
		p.line("  (the fixture network is unknown: resistances, inductance and capacitances cannot be told)")
	} else {
		row("motional resistance", "R1", m.MotionalResistanceOhm, verdict.UnitOhm)
		row("motional inductance", "L1", m.MotionalInductanceHenry, verdict.UnitHenry)
		row("motional capacitance", "C1", m.MotionalCapacitanceFarad, verdict.UnitFarad)
		row("shunt capacitance (apparent)", "C0", m.ShuntCapacitanceFarad, verdict.UnitFarad)
		row("figure of merit", "M", m.FigureOfMerit, verdict.UnitNone)
		optional("resonance frequency", "fr", m.ResonanceHz, verdict.UnitHertz)
		optional("resonance resistance", "Rr", m.ResonanceResistanceOhm, verdict.UnitOhm)
		optional("antiresonance frequency", "fa", m.AntiresonanceHz, verdict.UnitHertz)
		row("parallel resonance frequency", "fp", m.ParallelResonanceHz, verdict.UnitHertz)
	}
	if l := j.Load; l != nil {
		p.line("  with %s in %s", verdict.FormatBound(l.LoadCapacitanceFarad, verdict.UnitFarad), l.Connection)
		row("load resonance frequency", "fL", l.LoadResonanceHz, verdict.UnitHertz)
		row("load resonance resistance", "RL", l.LoadResonanceResistanceOhm, verdict.UnitOhm)
		row("pulling sensitivity", "S", l.PullingSensitivityPPMPerPF, verdict.UnitPPMPerPF)
	}
	if q := j.Quality; q != nil {
		p.line("\nMain sweep")
		chi := "not known (receiver noise not stated)"
		if q.ReducedChiSquare > 0 {
			chi = fmt.Sprintf("%.3f", q.ReducedChiSquare)
		}
		p.line("  signal to noise %.1f dB, reduced chi-square %s, residual correlation %.3f", q.SNRDecibel, chi, q.ResidualCorrelation)
		if q.SettlingTimeConstants > 0 {
			p.line("  dwell %.2f loaded time constants", q.SettlingTimeConstants)
		}
	}
}

// budget writes where the uncertainty comes from, as standard uncertainties.
func (p *printer) budget(j *verdict.Judgement) {
	if len(j.Budget) == 0 {
		return
	}
	p.line("\nUncertainty budget (standard uncertainties)")
	p.line("  %-24s %12s %12s %12s %12s", "source", "fs", "R1", "L1", "C0")
	share := func(v float64, unit string) string {
		if v == 0 {
			return "–"
		}
		return verdict.FormatBound(rounded(v), unit)
	}
	for _, b := range j.Budget {
		p.line("  %-24s %12s %12s %12s %12s", strings.ReplaceAll(b.Source, "_", " "),
			share(b.MotionalResonanceHz, verdict.UnitHertz), share(b.MotionalResistanceOhm, verdict.UnitOhm),
			share(b.MotionalInductanceHenry, verdict.UnitHenry), share(b.ShuntCapacitanceFarad, verdict.UnitFarad))
	}
}

// rounded keeps two figures of a share.
func rounded(v float64) float64 {
	if v == 0 || math.IsInf(v, 0) || math.IsNaN(v) {
		return v
	}
	unit := math.Pow(10, math.Floor(math.Log10(math.Abs(v)))-1)
	return math.Round(v/unit) * unit
}
