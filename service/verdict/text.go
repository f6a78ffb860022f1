package verdict

import (
	"fmt"
	"strconv"

	"example.com/admit/service/parttype"
)

// findingText says what was measured, against what, and how that came out.
func findingText(f Finding, rule parttype.Rule, confidence float64) string {
	text := fmt.Sprintf("%s %s (k = 2%s), %s", Label(f.Quantity, f.Where), Format(f.Measured, f.Unit), meanText(f), limitText(f.Bounds, f.Unit))
	inside := Decide(parttype.Simple, 0, f.Measured.Value, f.Bounds, 0) == Conforms
	switch {
	case f.Outcome == Conforms && inside:
		return text + ": conforms"
	case f.Outcome == Conforms:
		return text + fmt.Sprintf(": outside, but not with the %s %% certainty that %s asks for", percent(confidence), rule)
	case f.Outcome == Undecided:
		return text + fmt.Sprintf(": too close to decide, conformance probability %s %%, %s asks for %s %%", percent(f.ConformanceProbability), rule, percent(confidence))
	}
	return text + ": out of limit"
}

// meanText says of how many readings the value is the mean.
func meanText(f Finding) string {
	if f.Readings < 2 {
		return ""
	}
	return fmt.Sprintf(", mean of %d readings", f.Readings)
}

// unseenText says that nothing was seen, and what would have been.
func unseenText(f Finding, u *Unseen, rule parttype.Rule) string {
	text := fmt.Sprintf("%s: no response was seen, and one suppressed by less than %s would have been with a probability of %s %%; %s",
		Label(f.Quantity, f.Where), FormatBound(rounded(u.AtLeast, 3), f.Unit), percent(u.Probability), limitText(f.Bounds, f.Unit))
	switch f.Outcome {
	case Conforms:
		return text + ": conforms"
	case Violates:
		return text + ": out of limit"
	}
	return text + fmt.Sprintf(": cannot be decided, as %s asks", rule)
}

// rounded keeps some significant figures.
func rounded(v float64, figures int) float64 {
	r, err := strconv.ParseFloat(strconv.FormatFloat(v, 'g', figures, 64), 64)
	if err != nil {
		return v
	}
	return r
}

// suspendedText says why a limit was not judged, and shows what is known all the same.
func suspendedText(f Finding, r Reading) string {
	text := Label(f.Quantity, f.Where) + " not judged"
	if len(r.SuspendedBy) > 0 {
		text += fmt.Sprintf(" (%s)", r.SuspendedBy[0])
	}
	if r.Note != "" {
		text += ": " + r.Note
	}
	if f.HasValue {
		text += fmt.Sprintf("; reading %s (k = 2)", Format(f.Measured, f.Unit))
	}
	return text + ", " + limitText(f.Bounds, f.Unit)
}

// limitText writes the bounds.
func limitText(b parttype.Bounds, unit string) string {
	switch {
	case b.Min != nil && b.Max != nil:
		return fmt.Sprintf("limits %s to %s", FormatBound(*b.Min, unit), FormatBound(*b.Max, unit))
	case b.Max != nil:
		return "limit at most " + FormatBound(*b.Max, unit)
	case b.Min != nil:
		return "limit at least " + FormatBound(*b.Min, unit)
	}
	return "no limit"
}

// percent writes a probability in percent with the digits that matter near 0 and 1.
func percent(p float64) string { return fmt.Sprintf("%.4g", 100*p) }

// labels are the quantities in words.
var labels = map[parttype.Quantity]string{
	parttype.FrequencyDeviation:      "Frequency deviation",
	parttype.MotionalResistance:      "Motional resistance",
	parttype.ResonanceResistance:     "Resonance resistance",
	parttype.LoadResonanceResistance: "Load resonance resistance",
	parttype.MotionalCapacitance:     "Motional capacitance",
	parttype.ShuntCapacitance:        "Shunt capacitance",
	parttype.QualityFactor:           "Quality factor",
	parttype.PullingSensitivity:      "Pulling sensitivity",
	parttype.PullingRange:            "Pulling range",
	parttype.StartMargin:             "Start margin",
	parttype.DriveResistanceRatio:    "Resistance ratio",
	parttype.DriveMotionalResistance: "Motional resistance",
	parttype.DriveFrequencyShift:     "Frequency shift",
	parttype.DriveReturnShift:        "Return shift",
	parttype.OvertoneSuppression:     "Overtone suppression",
	parttype.UnwantedModeSuppression: "Unwanted mode suppression",
}

// Label names a quantity in words, with where it was measured.
func Label(q parttype.Quantity, w Where) string {
	text := labels[q]
	if text == "" {
		text = string(q)
	}
	switch {
	case w.DriveStep >= 0:
		text += fmt.Sprintf(" at drive step %d", w.DriveStep)
	case w.Order > 0:
		text += fmt.Sprintf(" of overtone %d", w.Order)
	case w.FrequencyRatio > 0:
		text += fmt.Sprintf(" at frequency ratio %g", w.FrequencyRatio)
	case w.FromHz != 0 || w.ToHz != 0:
		text += fmt.Sprintf(" from %s to %s of the main mode", FormatBound(w.FromHz, UnitHertz), FormatBound(w.ToHz, UnitHertz))
	}
	return text
}
