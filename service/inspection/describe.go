package inspection

import (
	"fmt"
	"math"

	"example.com/admit/service/crystal"
	"example.com/admit/service/parttype"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// describe fills in what was measured, beside what was judged of it.
func (w *workup) describe(j *verdict.Judgement) {
	j.Drive, j.Modes, j.Observability = w.drive, w.modes, w.observability
	j.ShuntCapacitanceFarad = w.shunt
	if f := w.described(); f != nil {
		w.describeMain(j, f.est)
	}
	if j.Order = w.overtoneOrder(); j.Order != nil && j.Order.Order != w.p.Overtone && j.Order.Probability > 0.9 {
		w.remark("The part type states overtone %d. %s", w.p.Overtone, j.Order.Text)
	}
	w.describeReferral()
	w.describeUnused()
	j.Remarks = append(j.Remarks, w.remarks...)
}

// described returns the sweep that the main quantities are taken from: the one that the limits are held against, else the main sweep, else the first
// level of the series.
func (w *workup) described() *fitted {
	if w.nominal != nil {
		return w.nominal
	}
	if w.main >= 0 {
		return w.fits[w.main]
	}
	for k := range w.series.levels {
		if f := w.series.levels[k].fit; f != nil {
			return f
		}
	}
	return nil
}

// describeUnused counts the sweeps that nothing asked for.
func (w *workup) describeUnused() {
	unused := 0
	for i := range w.c.Sweeps {
		switch s := &w.c.Sweeps[i]; {
		case s.Role == sweep.Drive && w.p.Drive == nil, s.Role == sweep.Unwanted:
			unused++
		}
	}
	if unused > 0 {
		w.remark("%d further sweeps were kept; this part type has no limits that need them.", unused)
	}
}

// describeMain fills in the quantities of the main mode, and how good the sweep was.
func (w *workup) describeMain(j *verdict.Judgement, est *resonance.Estimate) {
	q := est.Quality
	if q.Points > 0 {
		j.Quality = &verdict.Quality{
			SNRDecibel: finiteOr0(q.SNRDecibel), ReducedChiSquare: finiteOr0(q.ReducedChiSquare),
			ResidualCorrelation: finiteOr0(q.ResidualCorrelation), SettlingTimeConstants: finiteOr0(q.SettlingTimeConstants),
		}
	}
	if est.State == resonance.Found && est.Detail != "" {
		j.Remarks = append(j.Remarks, est.Detail)
	}
	if q.WildPoints > 0 {
		j.Remarks = append(j.Remarks, fmt.Sprintf("%d of %d points lie far from the fitted curve and carry little weight.", q.WildPoints, q.Points))
	}
	if !known(est) {
		return
	}
	j.ScaleUnknown = est.ScaleUnknown
	j.Main = mainOf(est)
	if j.Main == nil {
		return
	}
	if !w.p.Condition.SeriesResonance && !est.ScaleUnknown {
		j.Load = loadOf(w.p, est)
	}
	j.Budget = budgetOf(est)
}

// grade names the first grade that an accepted unit fits.
func (w *workup) grade(j *verdict.Judgement) {
	grades := w.p.Grades
	if j.Verdict != verdict.Pass || grades == nil {
		return
	}
	readings := make([][]verdict.Reading, len(grades.Of))
	for g := range grades.Of {
		for _, limit := range grades.Of[g].Limits {
			r := w.mainReading(limit)
			for i, own := range w.p.Limits {
				// A limit on the same quantity has a mean of all attempts.
				if past, ok := verdict.PastOf(&j.Findings[i]); ok && own.Quantity == limit.Quantity && own.Of == limit.Of && own.FromFarad == limit.FromFarad && own.ToFarad == limit.ToFarad {
					r.Measured, r.CommonUncertainty = past.Mean, past.CommonUncertainty
				}
			}
			readings[g] = append(readings[g], r)
		}
	}
	if j.Grade = verdict.Grade(grades, w.p.Decision, readings); j.Grade == "" {
		j.Remarks = append(j.Remarks, "The unit meets every limit, but fits none of the grades with certainty.")
	}
}

// mainOf returns the quantities of the main mode; nil when one of those that every unit has cannot be told.
func mainOf(est *resonance.Estimate) *verdict.Main {
	sound := true
	must := func(f func(crystal.Unit) float64) verdict.Value {
		v, ok := measure(est, func(u crystal.Unit) (float64, bool) { return f(u), true })
		sound = sound && ok
		return v
	}
	maybe := func(f func(crystal.Unit) (float64, error)) *verdict.Value {
		v, ok := measure(est, func(u crystal.Unit) (float64, bool) {
			x, err := f(u)
			return x, err == nil
		})
		if !ok {
			return nil
		}
		return &v
	}
	m := &verdict.Main{
		MotionalResonanceHz: must(func(u crystal.Unit) float64 { return u.Modes[0].ResonanceHz }),
		QualityFactor:       must(func(u crystal.Unit) float64 { return u.Modes[0].QualityFactor() }),
	}
	if !est.ScaleUnknown {
		m.MotionalResistanceOhm = must(func(u crystal.Unit) float64 { return u.Modes[0].ResistanceOhm })
		m.MotionalInductanceHenry = must(func(u crystal.Unit) float64 { return u.Modes[0].InductanceHenry })
		m.MotionalCapacitanceFarad = must(func(u crystal.Unit) float64 { return u.Modes[0].CapacitanceFarad() })
		m.ShuntCapacitanceFarad = must(func(u crystal.Unit) float64 { return u.ShuntCapacitanceFarad })
		m.FigureOfMerit = must(func(u crystal.Unit) float64 { return u.FigureOfMerit() })
		m.ParallelResonanceHz = must(func(u crystal.Unit) float64 { return u.ParallelResonanceHz() })
		m.ResonanceHz = maybe(func(u crystal.Unit) (float64, error) { f, _, err := u.Resonance(); return f, err })
		m.ResonanceResistanceOhm = maybe(func(u crystal.Unit) (float64, error) { _, r, err := u.Resonance(); return r, err })
		m.AntiresonanceHz = maybe(func(u crystal.Unit) (float64, error) { f, _, err := u.Antiresonance(); return f, err })
	}
	if !sound {
		return nil
	}
	return m
}

// loadOf returns the quantities at the part type's load, or nil where the unit has none.
func loadOf(p *parttype.PartType, est *resonance.Estimate) *verdict.Load {
	load, how := p.Condition.LoadCapacitanceFarad, p.Condition.Connection
	frequency, ok1 := measure(est, func(u crystal.Unit) (float64, bool) { f, _, err := u.LoadResonance(load, how); return f, err == nil })
	resistance, ok2 := measure(est, func(u crystal.Unit) (float64, bool) { _, r, err := u.LoadResonance(load, how); return r, err == nil })
	sensitivity, ok3 := measure(est, func(u crystal.Unit) (float64, bool) {
		s, err := u.PullingSensitivity(load, how)
		return s * 1e-6, err == nil
	})
	if !ok1 || !ok2 || !ok3 {
		return nil
	}
	return &verdict.Load{
		LoadCapacitanceFarad: load, Connection: string(how),
		LoadResonanceHz: frequency, LoadResonanceResistanceOhm: resistance, PullingSensitivityPPMPerPF: sensitivity,
	}
}

// noiseInfluence is the name of the statistical part in the budget.
const noiseInfluence = "noise"

// budgetOf returns the named shares of the standard uncertainties, the statistical one first, shares of one name together.
func budgetOf(est *resonance.Estimate) []verdict.BudgetLine {
	line := func(name string, m *resonance.Matrix) verdict.BudgetLine {
		u := func(p resonance.Parameter) float64 { return math.Sqrt(math.Max(0, m[p][p])) }
		b := verdict.BudgetLine{Source: name, MotionalResonanceHz: u(resonance.ResonanceHz)}
		if !est.ScaleUnknown {
			b.MotionalResistanceOhm = u(resonance.LogResistance) * math.Exp(est.Value[resonance.LogResistance])
			b.MotionalInductanceHenry = u(resonance.LogInductance) * math.Exp(est.Value[resonance.LogInductance])
			b.ShuntCapacitanceFarad = u(resonance.ShuntCapacitanceFarad)
		}
		return b
	}
	lines := []verdict.BudgetLine{line(noiseInfluence, &est.Statistical)}
	var names []string
	sums := map[string]*resonance.Matrix{}
	for i := range est.Systematic {
		c := &est.Systematic[i]
		sum := sums[c.Name]
		if sum == nil {
			sum = new(resonance.Matrix)
			sums[c.Name] = sum
			names = append(names, c.Name)
		}
		for r := range sum {
			for k := range sum[r] {
				sum[r][k] += c.Covariance[r][k]
			}
		}
	}
	for _, n := range names {
		lines = append(lines, line(n, sums[n]))
	}
	return lines
}

func finiteOr0(v float64) float64 {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return 0
	}
	return v
}
