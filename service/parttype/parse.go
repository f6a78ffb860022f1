package parttype

import (
	"fmt"
	"slices"
	"strings"

	"example.com/admit/service/crystal"
	"example.com/admit/service/parttype/document"
)

// What a limits file that does not say it otherwise means. Common practice, no source.
const (
	DefaultRule             = GuardedAcceptance
	DefaultConfidence       = 0.95
	DefaultAttempts         = 2
	DefaultAfterLastAttempt = SetAside
	DefaultTolerancePercent = 15  // of a drive level
	DefaultWaitSeconds      = 0.3 // after a level above nominal; the frequency of an AT unit settles with some 0.2 s

	DefaultCurveUncertaintyPercent = 10 // of what a temperature curve says
)

// Limits of a limits file; each is named in the fault of a file that is over it.
const (
	MaxName        = 64 // characters of a name
	MaxVersion     = 999999
	MaxOvertone    = 99
	MaxAttempts    = 9
	MaxDriveLevels = 64
	MaxWindows     = 64 // overtones, and unwanted-mode spans
	MaxGrades      = 64
	MinConfidence  = 0.5
	MaxConfidence  = 0.9999
)

// Parse reads a limits file. Name is that of the file, for messages. The error is document.Faults and holds every fault of the file, each
// with its line, its key, what was expected and what was given; the part type is nil then.
func Parse(name string, source []byte) (*PartType, error) {
	d := document.Parse(name, source)
	r := reader{}
	r.partType(d.Root())
	if err := d.Err(); err != nil {
		return nil, err
	}
	r.p.Source = slices.Clone(source)
	return &r.p, nil
}

// reader fills a part type. Sections are read in an order in which each finds what it is checked against.
type reader struct{ p PartType }

// seriesResonance reports whether the part type has no load capacitance, which some limits need.
func (r *reader) seriesResonance() bool { return r.p.Condition.SeriesResonance }

// partType reads the whole file. What has no default is asked for: a limits file is agreed between people, and a value that was left out
// would be agreed by nobody.
func (r *reader) partType(root document.Value) {
	f, ok := root.Fields("part_type", "version", "vibration_mode", "overtone", "nominal_frequency", "calibration_required",
		"circuit_condition", "drive_level", "maximum_drive_level", "temperature", "limits", "drive", "overtones", "unwanted_modes",
		"decision", "grades")
	if !ok {
		return
	}
	p := &r.p
	p.Name, _ = readName(f.Need("part_type", "the name of the part type"))
	p.Version, _ = f.Need("version", "a whole number from 1").Int(fmt.Sprintf("a whole number from 1 to %d", MaxVersion), 1, MaxVersion)
	p.VibrationMode, _ = document.OneOf(f.Need("vibration_mode", "a mode of vibration such as thickness-shear"), VibrationModes()...)
	p.Overtone, _ = r.order(f.Need("overtone", "the overtone order, 1 for a fundamental"))
	p.NominalFrequencyHz = r.nominalFrequency(f.Need("nominal_frequency", hertz.example))
	p.CalibrationRequired = true
	if required, ok := f.Get("calibration_required").Bool(); ok {
		p.CalibrationRequired = required
	}
	r.condition(f.Need("circuit_condition", "series-resonance, or load_capacitance and load_connection"))
	r.driveLevels(f)
	r.temperature(f.Get("temperature"))
	p.Limits = r.limits(f.Need("limits", "a mapping of limits"))
	r.drive(f.Get("drive"))
	r.overtones(f.Get("overtones"))
	r.unwantedModes(f.Get("unwanted_modes"))
	r.decision(f.Get("decision"))
	r.grades(f.Get("grades"))
}

// readName reads a name that can stand in a file name, a label and an address.
func readName(v document.Value) (string, bool) {
	want := fmt.Sprintf("1 to %d characters of A-Z a-z 0-9 . _ -", MaxName)
	text, ok := v.Text(want)
	if !ok {
		return "", false
	}
	foreign := strings.ContainsFunc(text, func(c rune) bool {
		return !(c >= 'A' && c <= 'Z' || c >= 'a' && c <= 'z' || c >= '0' && c <= '9' || c == '.' || c == '_' || c == '-')
	})
	if text == "" || len(text) > MaxName || foreign {
		v.Fault("%s", want)
		return "", false
	}
	return text, true
}

// order reads an overtone order. A plate in thickness shear has odd ones only, because the electrodes of an even one would carry no charge.
func (r *reader) order(v document.Value) (int, bool) {
	want := fmt.Sprintf("a whole number from 1 to %d", MaxOvertone)
	n, ok := v.Int(want, 1, MaxOvertone)
	if ok && n%2 == 0 && r.p.VibrationMode == ThicknessShear {
		v.Fault("an odd number, as the vibration mode is %s", ThicknessShear)
		return 0, false
	}
	return n, ok
}

// nominalFrequency holds the frequency against what a sweep can be taken of.
func (r *reader) nominalFrequency(v document.Value) float64 {
	hz, ok := quantity(v, hertz)
	if ok && !(hz >= 1 && hz <= 1e12) {
		v.Fault("a frequency from 1 Hz to 1000 GHz")
	}
	return hz
}

// condition reads series-resonance, or a load capacitance and its connection. The connection has no default, since with losses the two
// give frequencies that lie up to some ppm apart.
func (r *reader) condition(v document.Value) {
	if v.Present() && !v.IsMapping() {
		text, ok := v.Text("series-resonance, or load_capacitance and load_connection")
		if r.p.Condition.SeriesResonance = text == "series-resonance"; ok && !r.p.Condition.SeriesResonance {
			v.Fault("series-resonance, or load_capacitance and load_connection")
		}
		return
	}
	f, ok := v.Fields("load_capacitance", "load_connection")
	if !ok {
		return
	}
	c := &r.p.Condition
	c.LoadCapacitanceFarad, _ = positive(f.Need("load_capacitance", farad.example), farad)
	c.Connection, _ = document.OneOf(f.Need("load_connection", "series or parallel"), crystal.SeriesLoad, crystal.ParallelLoad)
}

// driveLevels reads the level that the limits hold at and the one that nothing may exceed.
func (r *reader) driveLevels(f document.Fields) {
	level, levelOK := positive(f.Need("drive_level", watt.example), watt)
	maximum, maximumOK := positive(f.Need("maximum_drive_level", watt.example), watt)
	r.p.DriveLevelWatt, r.p.MaximumDriveWatt = level, maximum
	if levelOK && maximumOK && level > maximum {
		given, _ := f.Get("maximum_drive_level").Text("")
		f.Get("drive_level").Fault("at most the maximum_drive_level, %s", given)
	}
}

// temperature reads where the limits hold. The allowed range need not hold the reference: a part may be specified hot and tested cold.
func (r *reader) temperature(v document.Value) {
	f, ok := v.Fields("reference_c", "allowed_c", "curve")
	if !ok {
		return
	}
	t := &Temperature{}
	reference := f.Need("reference_c", "a temperature in degrees Celsius")
	if c, ok := reference.Number("a temperature in degrees Celsius"); ok {
		if t.ReferenceC = c; !(c >= celsius.lowest && c <= celsius.highest) {
			reference.Fault("%s", celsius.reach("at least", "at most"))
		}
	}
	if allowed, ok := f.Get("allowed_c").Fields("min", "max"); ok {
		t.AllowedC = readBounds(allowed, celsius)
	}
	t.CurveUncertaintyPercent = DefaultCurveUncertaintyPercent
	if curve, ok := f.Get("curve").Fields("first", "second", "third", "standard_uncertainty_percent"); ok {
		for i, key := range []string{"first", "second", "third"} {
			t.Curve[i], _ = curve.Get(key).Number("a number of ppm/K^n")
		}
		if percent, ok := curve.Get("standard_uncertainty_percent").Number("a number of percent"); ok {
			if t.CurveUncertaintyPercent = percent; !(percent >= 0 && percent <= 100) {
				curve.Get("standard_uncertainty_percent").Fault("0 to 100 percent")
			}
		}
	}
	r.p.Temperature = t
}

// decision reads how undecided readings are treated, over the defaults.
func (r *reader) decision(v document.Value) {
	d := &r.p.Decision
	*d = Decision{DefaultRule, DefaultConfidence, DefaultAttempts, DefaultAfterLastAttempt}
	f, ok := v.Fields("rule", "confidence", "attempts", "after_last_attempt")
	if !ok {
		return
	}
	if rule, ok := document.OneOf(f.Get("rule"), Rules()...); ok {
		d.Rule = rule
	}
	if confidence, ok := readConfidence(f.Get("confidence")); ok {
		d.Confidence = confidence
	}
	if n, ok := f.Get("attempts").Int(fmt.Sprintf("a whole number from 1 to %d", MaxAttempts), 1, MaxAttempts); ok {
		d.Attempts = n
	}
	if after, ok := document.OneOf(f.Get("after_last_attempt"), SetAside, Fail); ok {
		d.AfterLastAttempt = after
	}
}

// grades reads the bins. A grade without limits takes whatever the grades before it left.
func (r *reader) grades(v document.Value) {
	f, ok := v.Fields("adjacent", "of")
	if !ok {
		return
	}
	g := &Grades{}
	g.Adjacent, _ = f.Get("adjacent").Bool()
	items, _ := readItems(f.Need("of", "a list of grades"), "a list of grades, each with a name and limits", MaxGrades)
	names := map[string]bool{}
	for _, item := range items {
		grade, ok := item.Fields("name", "limits")
		if !ok {
			continue
		}
		name, ok := readName(grade.Need("name", "the name of the grade"))
		if ok && names[name] {
			grade.Get("name").Fault("a name that no other grade has")
		}
		names[name] = true
		g.Of = append(g.Of, Grade{Name: name, Limits: r.limits(grade.Need("limits", "a mapping of limits, which may be empty"))})
	}
	r.p.Grades = g
}

// readItems reads a list of 1 to most items.
func readItems(v document.Value, want string, most int) ([]document.Value, bool) {
	items, ok := v.Items(want)
	if ok && (len(items) == 0 || len(items) > most) {
		v.Fault("a list of 1 to %d", most)
		return nil, false
	}
	return items, ok
}
