package parttype

import (
	"fmt"
	"math"
)

// Warnings lists, one sentence each, limits that can decide nothing because others imply them, and limits that exclude each other: both are legal, and
// mostly meant otherwise. What one limit implies of another follows from the lossless relations of the equivalent circuit,
//
//	Q = 1/(2 pi fs C1 R1)     RL = R1 (1 + C0/CL)^2     Rr >= R1
//	S = -C1/(2 (C0 + CL)^2)   D = C1/2 (1/(C0 + C') - 1/(C0 + C''))     margin = |Rn|/RL
//
// with fs at the nominal frequency, which is right to some hundred ppm: borderline cases are not warned of.
func Warnings(p *PartType) []string {
	w := warner{p: p, of: map[Quantity]span{}, limit: map[Quantity]*Limit{}}
	for i := range p.Limits {
		l := &p.Limits[i]
		w.of[l.Quantity], w.limit[l.Quantity] = spanOf(l.Bounds), l
	}
	w.resistance()
	w.load()
	w.pulling()
	w.drive()
	w.suppressions()
	return w.found
}

// span is what is left of a positive quantity.
type span struct{ low, high float64 }

// anything is a quantity that nothing limits.
func anything() span { return span{0, math.Inf(1)} }

func spanOf(b Bounds) span {
	s := anything()
	if b.Min != nil {
		s.low = *b.Min
	}
	if b.Max != nil {
		s.high = *b.Max
	}
	return s
}

// borderline is how near to each other two figures may be without a warning.
const borderline = 1e-3

type warner struct {
	p     *PartType
	of    map[Quantity]span
	limit map[Quantity]*Limit
	found []string
}

func (w *warner) get(q Quantity) span {
	if s, ok := w.of[q]; ok {
		return s
	}
	return anything()
}

// implied notes that a limit is idle when what the others leave lies inside it, and that no unit meets all when nothing is left.
func (w *warner) implied(name string, limit, left span, by string) {
	switch {
	case left.low > limit.high*(1+borderline) || left.high < limit.low*(1-borderline):
		w.found = append(w.found, fmt.Sprintf("%s: no unit can meet it together with %s, which leave %s", name, by, left))
	case left.low >= limit.low*(1+borderline) || limit.low <= 0:
		if left.high <= limit.high*(1-borderline) || math.IsInf(limit.high, 1) && limit.low > 0 {
			w.found = append(w.found, fmt.Sprintf("%s: decides nothing, since %s already leave %s", name, by, left))
		}
	}
}

// String shows a span.
func (s span) String() string {
	switch {
	case s.low > 0 && !math.IsInf(s.high, 1):
		return fmt.Sprintf("%.4g to %.4g", s.low, s.high)
	case s.low > 0:
		return fmt.Sprintf("at least %.4g", s.low)
	}
	return fmt.Sprintf("at most %.4g", s.high)
}

// resistance holds R1, Rr and Q against each other, by C1.
func (w *warner) resistance() {
	c1 := w.get(MotionalCapacitance)
	angular := 2 * math.Pi * w.p.NominalFrequencyHz
	// R1 = 1/(w C1 Q) and Q = 1/(w C1 R1) are the same relation.
	from := func(x span) span { return span{1 / (angular * c1.high * x.high), 1 / (angular * c1.low * x.low)} }
	r1, has := w.of[MotionalResistance]
	q, hasQ := w.of[QualityFactor]
	if has && hasQ {
		before := len(w.found)
		w.implied(string(MotionalResistance), r1, from(q), "quality_factor and motional_capacitance")
		if len(w.found) == before {
			w.implied(string(QualityFactor), q, from(r1), "motional_resistance and motional_capacitance")
		}
	}
	if rr, hasR := w.of[ResonanceResistance]; has && hasR && r1.low <= 0 && rr.high <= r1.high {
		w.found = append(w.found, fmt.Sprintf("%s: decides nothing, since resonance_resistance is at most %.4g and R1 is never above it", MotionalResistance, rr.high))
	}
}

// load holds RL and the start margin against R1, by C0.
func (w *warner) load() {
	load := w.p.Condition.LoadCapacitanceFarad
	if w.p.Condition.SeriesResonance || !(load > 0) {
		return
	}
	c0 := w.get(ShuntCapacitance)
	grow := func(farad float64) float64 { return (1 + farad/load) * (1 + farad/load) }
	r1, hasR1 := w.of[MotionalResistance]
	rl, hasRL := w.of[LoadResonanceResistance]
	if hasR1 && hasRL {
		before := len(w.found)
		w.implied(string(LoadResonanceResistance), rl, span{r1.low * grow(c0.low), r1.high * grow(c0.high)}, "motional_resistance and shunt_capacitance")
		if len(w.found) == before {
			w.implied(string(MotionalResistance), r1, span{rl.low / grow(c0.high), rl.high / grow(c0.low)}, "load_resonance_resistance and shunt_capacitance")
		}
	}
	margin, hasMargin := w.of[StartMargin]
	if !hasMargin || !hasRL {
		return
	}
	negative := -w.limit[StartMargin].NegativeResistanceOhm
	before := len(w.found)
	w.implied(string(StartMargin), margin, span{negative / rl.high, negative / rl.low}, "load_resonance_resistance")
	if len(w.found) == before {
		w.implied(string(LoadResonanceResistance), rl, span{negative / margin.high, negative / margin.low}, "start_margin")
	}
}

// pulling holds sensitivity and range against C1 and C0.
func (w *warner) pulling() {
	c1, c0 := w.get(MotionalCapacitance), w.get(ShuntCapacitance)
	if l, ok := w.limit[PullingSensitivity]; ok {
		load := w.p.Condition.LoadCapacitanceFarad
		slope := func(c1, c0 float64) float64 { return c1 / (2 * (c0 + load) * (c0 + load)) * 1e-6 } // ppm/pF
		b := spanOf(Bounds{negated(l.Bounds.Max), negated(l.Bounds.Min)})
		w.implied(string(PullingSensitivity)+" (as a magnitude)", b, span{slope(c1.low, c0.high), slope(c1.high, c0.low)}, "motional_capacitance and shunt_capacitance")
	}
	if l, ok := w.limit[PullingRange]; ok {
		pull := func(c1, c0 float64) float64 { return c1 / 2 * (1/(c0+l.FromFarad) - 1/(c0+l.ToFarad)) * 1e6 }
		low := 0.0
		if !math.IsInf(c0.high, 1) {
			low = pull(c1.low, c0.high)
		}
		w.implied(string(PullingRange), spanOf(l.Bounds), span{low, pull(c1.high, c0.low)}, "motional_capacitance and shunt_capacitance")
	}
}

func negated(v *float64) *float64 {
	if v == nil {
		return nil
	}
	n := -*v
	return &n
}

// drive holds the limits of the drive series against those at the drive level.
func (w *warner) drive() {
	d := w.p.Drive
	if d == nil {
		return
	}
	r1 := w.get(MotionalResistance)
	level := spanOf(d.MotionalResistance)
	nominal := false
	for _, watt := range d.LevelsWatt {
		nominal = nominal || math.Abs(watt/w.p.DriveLevelWatt-1) < 1e-6
	}
	if _, limited := w.of[MotionalResistance]; limited && nominal && d.MotionalResistance.Max != nil && level.high <= r1.high && r1.low <= 0 {
		w.found = append(w.found, fmt.Sprintf("%s: decides nothing, since drive.motional_resistance is at most %.4g at every level and the drive level is one of them", MotionalResistance, level.high))
	}
	if d.MotionalResistance.Max != nil && d.ResistanceRatio != nil && !math.IsInf(r1.high, 1) {
		highest := 0.0
		for i, row := range d.ResistanceRatio {
			upTo := r1.high
			if row.UpToOhm > 0 && i < len(d.ResistanceRatio)-1 {
				upTo = math.Min(row.UpToOhm, r1.high)
			}
			highest = math.Max(highest, upTo*row.Max)
		}
		if highest <= level.high*(1-borderline) {
			w.found = append(w.found, fmt.Sprintf("%s: decides nothing, since motional_resistance and drive.resistance_ratio already leave at most %.4g", DriveMotionalResistance, highest))
		}
	}
	if !nominal && (d.ResistanceRatio != nil || d.FrequencyShiftPPM.Max != nil || d.FrequencyShiftPPM.Min != nil) {
		w.found = append(w.found, fmt.Sprintf("drive.levels: none of them is the drive_level of %.4g W, with which they are compared; the main sweep has to stand in", w.p.DriveLevelWatt))
	}
	if !(d.LevelsWatt[0] < w.p.DriveLevelWatt) {
		w.found = append(w.found, "drive.levels: the first is not below the drive_level; a unit that sleeps at low drive is not found")
	}
}

// suppressions looks at limits that only a unit without that response can meet, or every unit does.
func (w *warner) suppressions() {
	for i := range w.p.Overtones {
		o := &w.p.Overtones[i]
		if o.SuppressionDB.Max == nil && o.SuppressionDB.Min != nil && o.Order > w.p.Overtone && o.Definition == ResistanceRatio && *o.SuppressionDB.Min <= 0 {
			w.found = append(w.found, fmt.Sprintf("overtones[%d].suppression_db: an overtone above the main mode is hardly ever the stronger of the two; at least %g dB decides next to nothing", i, *o.SuppressionDB.Min))
		}
	}
}
