package inspection

import (
	"slices"

	"example.com/admit/service/verdict"
)

// Background is what earlier inspections tell about one that is judged. It is recorded with it: with the same samples, part type, calibration and
// background the judgement is the same. The zero value is an inspection of which nothing earlier is known.
type Background struct {
	AttemptsUsed   int            // by the unit since it last passed
	HighAtLowDrive int            // how many of these found the resistance high at the first low level
	Readings       []verdict.Past // means of the valid readings of these attempts, by limit
	Lot            *LotMedian     // nil: too few units of the lot
	Previous       *PreviousUnit  // nil: none, or another part type
}

// LotMedian holds the running medians of the units of a lot that passed.
type LotMedian struct {
	Units                                                  int
	ResistanceOhm, CapacitanceFarad, ShuntCapacitanceFarad float64 // R1, C1, C0
}

// PreviousUnit is the unit that was measured before at the same station. Its uncertainties are those of a repeat: noise and contact.
type PreviousUnit struct {
	Unit                                                                UnitID
	ResonanceHz, ResistanceOhm, CapacitanceFarad, ShuntCapacitanceFarad verdict.Value // fs, R1, C1, C0
}

// Limits of what is looked up for a background.
const (
	mostAttempts = 32 // inspections of one unit
	lotUnits     = 31 // units that a running median is of
	leastUnits   = 5  // fewer have no median worth the name
)

// attempts adds what earlier inspections of the unit tell, newest first, back to the one that accepted it: a unit that comes back after it passed
// starts anew. Readings held against another version of the limits are not comparable and are left out, the attempts still count.
func (b *Background) attempts(newestFirst []*Record, version int) {
	seen := map[limitKey]bool{}
	for _, r := range newestFirst {
		j := &r.Judgement
		if j.Verdict == verdict.Pass {
			return
		}
		if j.UsesAttempt() {
			b.AttemptsUsed++
		}
		if namedCause(j.RetestCauses, verdict.HighResistanceAtLowDrive) {
			b.HighAtLowDrive++
		}
		if r.PartType.Version != version {
			continue
		}
		for i := range j.Findings {
			p, ok := verdict.PastOf(&j.Findings[i])
			if key := (limitKey{string(p.Quantity), p.Where}); ok && !seen[key] {
				seen[key] = true // the newest mean has the older readings in it
				b.Readings = append(b.Readings, p)
			}
		}
	}
}

type limitKey struct {
	quantity string
	where    verdict.Where
}

// trace is what the desk remembers of a recorded inspection.
type trace struct {
	sequence uint64
	partType string
	passed   bool
	unit     *PreviousUnit // nil: no unit was told
}

// traceOf returns what later inspections need of a record.
func traceOf(r *Record) trace {
	t := trace{sequence: r.Sequence, partType: r.PartType.Name, passed: r.Judgement.Verdict == verdict.Pass}
	m := r.Judgement.Main
	if m == nil || r.Judgement.ScaleUnknown {
		return t
	}
	own := func(share func(verdict.BudgetLine) float64) (u float64) {
		for _, line := range r.Judgement.Budget {
			if line.Source == noiseInfluence || line.Source == contactInfluence {
				u = max(u, share(line))
			}
		}
		return u
	}
	relativeInductance := 0.0
	if l := m.MotionalInductanceHenry.Value; l > 0 {
		relativeInductance = own(func(l verdict.BudgetLine) float64 { return l.MotionalInductanceHenry }) / l
	}
	t.unit = &PreviousUnit{
		Unit:                  r.Begin.Unit,
		ResonanceHz:           verdict.Value{Value: m.MotionalResonanceHz.Value, StandardUncertainty: own(func(l verdict.BudgetLine) float64 { return l.MotionalResonanceHz })},
		ResistanceOhm:         verdict.Value{Value: m.MotionalResistanceOhm.Value, StandardUncertainty: own(func(l verdict.BudgetLine) float64 { return l.MotionalResistanceOhm })},
		CapacitanceFarad:      verdict.Value{Value: m.MotionalCapacitanceFarad.Value, StandardUncertainty: relativeInductance * m.MotionalCapacitanceFarad.Value},
		ShuntCapacitanceFarad: verdict.Value{Value: m.ShuntCapacitanceFarad.Value, StandardUncertainty: own(func(l verdict.BudgetLine) float64 { return l.ShuntCapacitanceFarad })},
	}
	return t
}

// medianOf returns the running medians of a lot; nil when there are too few units.
func medianOf(units []*PreviousUnit) *LotMedian {
	if len(units) < leastUnits {
		return nil
	}
	middle := func(of func(*PreviousUnit) float64) float64 {
		values := make([]float64, len(units))
		for i, u := range units {
			values[i] = of(u)
		}
		slices.Sort(values)
		n := len(values)
		return (values[(n-1)/2] + values[n/2]) / 2
	}
	return &LotMedian{
		Units:                 len(units),
		ResistanceOhm:         middle(func(u *PreviousUnit) float64 { return u.ResistanceOhm.Value }),
		CapacitanceFarad:      middle(func(u *PreviousUnit) float64 { return u.CapacitanceFarad.Value }),
		ShuntCapacitanceFarad: middle(func(u *PreviousUnit) float64 { return u.ShuntCapacitanceFarad.Value }),
	}
}

func namedCause(causes []verdict.RetestCause, c verdict.Cause) bool {
	return slices.ContainsFunc(causes, func(k verdict.RetestCause) bool { return k.Cause == c })
}
