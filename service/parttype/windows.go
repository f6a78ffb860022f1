package parttype

import (
	"example.com/admit/service/parttype/document"
)

// overtones reads the overtone windows.
func (r *reader) overtones(v document.Value) {
	if !v.Present() {
		return
	}
	items, _ := readItems(v, "a list of overtone windows", MaxWindows)
	orders := map[int]bool{}
	for _, item := range items {
		f, ok := item.Fields("order", "frequency_ratio", "suppression_db", "definition")
		if !ok {
			continue
		}
		var limit OvertoneLimit
		order, ratio := f.Get("order"), f.Get("frequency_ratio")
		if order.Present() == ratio.Present() {
			f.Fault("want either order or frequency_ratio, got %s", map[bool]string{true: "both", false: "neither"}[order.Present()])
		}
		if n, ok := r.order(order); ok {
			switch limit.Order = n; {
			case n == r.p.Overtone:
				order.Fault("another order than that of the main mode")
			case orders[n]:
				order.Fault("an order that no other window has")
			}
			orders[n] = true
		}
		if x, ok := ratio.Number("a ratio of frequencies such as 6.27"); ok {
			if limit.FrequencyRatio = x; !(x > 0) || x == 1 {
				ratio.Fault("a ratio above 0 that is not 1")
			}
		}
		limit.SuppressionDB, limit.Decide, limit.Definition = readSuppression(f)
		r.p.Overtones = append(r.p.Overtones, limit)
	}
}

// unwantedModes reads the spans about the main mode in which other modes must be suppressed.
func (r *reader) unwantedModes(v document.Value) {
	if !v.Present() {
		return
	}
	items, _ := readItems(v, "a list of spans about the main mode", MaxWindows)
	for _, item := range items {
		f, ok := item.Fields("from", "to", "minimum_width", "suppression_db", "definition")
		if !ok {
			continue
		}
		var limit UnwantedLimit
		from, fromOK := quantity(f.Need("from", "a frequency relative to the main mode, such as -100 kHz"), hertz)
		to, toOK := quantity(f.Need("to", "a frequency relative to the main mode, such as 500 kHz"), hertz)
		width, widthOK := positive(f.Need("minimum_width", "the width of the narrowest mode that counts, such as 50 Hz"), hertz)
		switch spanOK := fromOK && toOK; {
		case spanOK && !(from < to):
			given, _ := f.Get("from").Text("")
			f.Get("to").Fault("a frequency above that of from, %s", given)
		case spanOK && widthOK && width > to-from:
			f.Get("minimum_width").Fault("a width within the span, at most %g Hz", to-from)
		}
		if nominal := r.p.NominalFrequencyHz; fromOK && nominal > 0 && from <= -nominal {
			f.Get("from").Fault("a span of frequencies above 0 Hz")
		}
		limit.FromHz, limit.ToHz, limit.MinimumWidthHz = from, to, width
		limit.SuppressionDB, limit.Decide, limit.Definition = readSuppression(f)
		r.p.UnwantedModes = append(r.p.UnwantedModes, limit)
	}
}

// readSuppression reads the limit of a suppression and what it means. The definition has no default: 20 dB of one is 14 dB of another.
func readSuppression(f document.Fields) (Bounds, Decide, Definition) {
	var bounds Bounds
	var decide Decide
	if limit, ok := f.Need("suppression_db", "a limit in decibels such as {min: 10}").Fields(boundKeys...); ok {
		bounds, decide = readBounds(limit, anyNumber), readDecide(limit)
	}
	definition, _ := document.OneOf(f.Need("definition", "what the suppression means, such as resistance-ratio"), Definitions()...)
	return bounds, decide, definition
}
