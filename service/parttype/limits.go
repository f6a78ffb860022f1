package parttype

import (
	"slices"

	"example.com/admit/service/parttype/document"
)

// limitKind is what a key of the limits section may hold.
type limitKind struct {
	quantity Quantity
	measure  measure
	loaded   bool     // exists only with a load capacitance
	extra    []string // keys beside those of every limit
	read     func(*reader, document.Fields, *Limit)
}

// limitKinds holds every key of the limits section. Adding a limit begins with a row here.
var limitKinds = []limitKind{
	{quantity: FrequencyDeviation, measure: measure{lowest: -1e6, highest: anyNumber.highest}, extra: []string{"of"}, read: (*reader).frequencyOf},
	{quantity: MotionalResistance, measure: resistance},
	{quantity: ResonanceResistance, measure: resistance},
	{quantity: LoadResonanceResistance, measure: resistance, loaded: true},
	{quantity: MotionalCapacitance, measure: capacitance},
	{quantity: ShuntCapacitance, measure: capacitance},
	{quantity: QualityFactor, measure: notNegative},
	{quantity: PullingSensitivity, measure: notPositive, loaded: true}, // more load capacitance, lower frequency
	{quantity: PullingRange, measure: notNegative, extra: []string{"from", "to"}, read: (*reader).pullingRange},
	{quantity: StartMargin, measure: notNegative, extra: []string{"negative_resistance"}, read: (*reader).startMargin},
}

// limits reads a limits section, in the order of the file.
func (r *reader) limits(v document.Value) []Limit {
	keys := make([]string, len(limitKinds))
	for i, k := range limitKinds {
		keys[i] = string(k.quantity)
	}
	section, ok := v.Fields(keys...)
	if !ok {
		return nil
	}
	var limits []Limit
	for _, key := range section.Keys() {
		i := slices.IndexFunc(limitKinds, func(k limitKind) bool { return string(k.quantity) == key })
		limits = append(limits, r.limit(section.Get(key), limitKinds[i]))
	}
	return limits
}

// limit reads one limit. What is special to its kind is read first, so that faults follow the order of the grammar.
func (r *reader) limit(v document.Value, kind limitKind) Limit {
	limit := Limit{Quantity: kind.quantity}
	f, ok := v.Fields(slices.Concat(kind.extra, boundKeys)...)
	if !ok {
		return limit
	}
	if kind.loaded && r.seriesResonance() {
		f.Fault("want no such limit with circuit_condition series-resonance: it needs a load capacitance")
	}
	if kind.read != nil {
		kind.read(r, f, &limit)
	}
	limit.Bounds = readBounds(f, kind.measure)
	limit.Decide = readDecide(f)
	return limit
}

// frequencyOf reads which frequency a deviation is of. It has no default: in a unit of low figure of merit the three lie ppm apart.
func (r *reader) frequencyOf(f document.Fields, limit *Limit) {
	v := f.Need("of", "load_resonance, resonance or motional_resonance")
	of, ok := document.OneOf(v, LoadResonance, Resonance, MotionalResonance)
	if ok && of == LoadResonance && r.seriesResonance() {
		v.Fault("resonance or motional_resonance with circuit_condition series-resonance")
	}
	limit.Of = of
}

// pullingRange reads the two load capacitances; from the smaller to the larger the frequency falls, and the range counts as positive.
func (r *reader) pullingRange(f document.Fields, limit *Limit) {
	from, fromOK := positive(f.Need("from", "the smaller load capacitance"), farad)
	to, toOK := positive(f.Need("to", "the larger load capacitance"), farad)
	if fromOK && toOK && !(from < to) {
		given, _ := f.Get("from").Text("")
		f.Get("to").Fault("a load capacitance above that of from, %s", given)
	}
	limit.FromFarad, limit.ToFarad = from, to
}

// startMargin reads the negative resistance that the customer's oscillator offers. Without a load capacitance the margin is to Rr.
func (r *reader) startMargin(f document.Fields, limit *Limit) {
	v := f.Need("negative_resistance", "the negative resistance of the oscillator, such as -400 ohm")
	value, ok := quantity(v, ohm)
	if ok && !(value < 0) {
		v.Fault("a resistance below 0 ohm")
	}
	limit.NegativeResistanceOhm = value
}
