package parttype

import (
	"slices"

	"example.com/admit/service/parttype/document"
)

// drive reads the drive-level section.
func (r *reader) drive(v document.Value) {
	f, ok := v.Fields("levels", "tolerance_percent", "wait", "resistance_ratio", "motional_resistance", "frequency_shift_ppm",
		"return_shift_ppm")
	if !ok {
		return
	}
	d := &Drive{TolerancePercent: DefaultTolerancePercent, WaitSeconds: DefaultWaitSeconds}
	r.p.Drive = d
	d.LevelsWatt = r.levels(f.Need("levels", "a list of powers"))
	if percent, ok := f.Get("tolerance_percent").Number("a number of percent"); ok {
		if d.TolerancePercent = percent; !(percent > 0 && percent <= 100) {
			f.Get("tolerance_percent").Fault("more than 0, at most 100 percent")
		}
	}
	if wait, ok := quantity(f.Get("wait"), second); ok {
		if d.WaitSeconds = wait; !(wait >= 0 && wait <= 3600) {
			f.Get("wait").Fault("0 s to 3600 s")
		}
	}
	if v := f.Get("resistance_ratio"); v.Present() {
		d.ResistanceRatio, d.ResistanceRatioDecide = readRatio(v)
	}
	if limit, ok := f.Get("motional_resistance").Fields(boundKeys...); ok {
		d.MotionalResistance, d.MotionalResistanceDecide = readBounds(limit, resistance), readDecide(limit)
	}
	if limit, ok := f.Get("frequency_shift_ppm").Fields(boundKeys...); ok {
		d.FrequencyShiftPPM, d.FrequencyShiftDecide = readBounds(limit, notNegative), readDecide(limit)
	}
	if limit, ok := f.Get("return_shift_ppm").Fields(slices.Concat([]string{"steps"}, boundKeys)...); ok {
		d.ReturnShiftPPM, d.ReturnShiftDecide = readBounds(limit, notNegative), readDecide(limit)
		d.ReturnSteps = readReturnSteps(limit.Need("steps", "the two steps to compare, such as [0, 4]"), d.LevelsWatt)
	}
}

// levels reads the powers of the series, in the order in which they are taken; nil when one of them cannot be used.
func (r *reader) levels(v document.Value) []float64 {
	items, ok := readItems(v, "a list of powers such as [100 nW, 10 uW, 100 nW]", MaxDriveLevels)
	if !ok {
		return nil
	}
	levels := make([]float64, 0, len(items))
	for _, item := range items {
		level, ok := positive(item, watt)
		if ok && r.p.MaximumDriveWatt > 0 && level > r.p.MaximumDriveWatt {
			item.Fault("at most the maximum_drive_level, %g W", r.p.MaximumDriveWatt)
			ok = false
		}
		if ok {
			levels = append(levels, level)
		}
	}
	if len(levels) < len(items) {
		return nil
	}
	return levels
}

// readRatio reads the largest ratio of R1 at a level to R1 at drive_level: one number, or a table by R1 at drive_level.
func readRatio(v document.Value) ([]RatioLimit, Decide) {
	f, ok := v.Fields("reference", "max", "rule", "confidence")
	if !ok {
		return nil, Decide{}
	}
	document.OneOf(f.Need("reference", "nominal-level"), "nominal-level")
	decide := readDecide(f)
	const want = "a ratio such as 1.4, or a table such as [{up_to: 30 ohm, max: 1.4}, {up_to: 60 ohm, max: 1.2}]"
	limit := f.Need("max", want)
	if limit.IsScalar() {
		return []RatioLimit{{Max: readRatioBound(limit, want)}}, decide
	}
	items, _ := readItems(limit, want, MaxWindows)
	var rows []RatioLimit
	for i, item := range items {
		row, ok := item.Fields("up_to", "max")
		if !ok {
			continue
		}
		ratio := RatioLimit{Max: readRatioBound(row.Need("max", "a ratio such as 1.4"), "a ratio such as 1.4")}
		upTo := row.Get("up_to")
		switch {
		case upTo.Present():
			ratio.UpToOhm, ok = positive(upTo, ohm)
			if last := len(rows) - 1; ok && last >= 0 && !(ratio.UpToOhm > rows[last].UpToOhm) {
				upTo.Fault("a resistance above that of the row before")
			}
		case i < len(items)-1:
			row.Fault("want up_to in every row but the last, got none")
		}
		rows = append(rows, ratio)
	}
	return rows, decide
}

// readRatioBound reads a largest ratio. The reading at drive_level has the ratio 1, so a smaller bound would fail every unit.
func readRatioBound(v document.Value, want string) float64 {
	x, ok := v.Number(want)
	if ok && !(x > 1) {
		v.Fault("a ratio above 1")
	}
	return x
}

// readReturnSteps reads the two steps of the series whose frequencies are compared: an earlier and a later one at the same level.
func readReturnSteps(v document.Value, levels []float64) []int {
	const want = "the two steps to compare, an earlier and a later one, such as [0, 4]"
	items, ok := v.Items(want)
	if ok && len(items) != 2 {
		v.Fault(want)
		return nil
	}
	var steps []int
	for _, item := range items {
		if step, ok := item.Int("the number of a level, from 0", 0, MaxDriveLevels-1); ok {
			if levels != nil && step >= len(levels) {
				item.Fault("the number of a level, 0 to %d", len(levels)-1)
				continue
			}
			steps = append(steps, step)
		}
	}
	switch {
	case len(steps) != 2:
	case steps[0] >= steps[1]:
		v.Fault(want)
	case levels != nil && levels[steps[0]] != levels[steps[1]]:
		v.Fault("two steps at one level, as a shift between levels is no return")
	}
	return steps
}
