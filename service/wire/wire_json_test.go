package wire

import (
	"bytes"
	"encoding/json"
	"flag"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/reflect/protoreflect"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
)

var update = flag.Bool("update", false, "rewrite the golden files")

// fullJudgement has every field of a judgement, each number another.
func fullJudgement() *verdict.Judgement {
	n := 0.0
	next := func() float64 { n++; return n }
	v := func() verdict.Value { return verdict.Value{Value: next(), StandardUncertainty: next() / 100} }
	p := func() *verdict.Value { x := v(); return &x }
	f := func() *float64 { x := next(); return &x }
	finding := func(q parttype.Quantity, w verdict.Where, o verdict.Outcome) verdict.Finding {
		return verdict.Finding{
			Quantity: q, Where: w, Measured: v(), HasValue: true, Unit: "ohm", Bounds: parttype.Bounds{Min: f(), Max: f()},
			ConformanceProbability: 0.5, Outcome: o, Text: "What was measured, with its limit.",
			CommonUncertainty: next() / 100, Readings: 2,
		}
	}
	suspended := finding(parttype.UnwantedModeSuppression, verdict.Where{DriveStep: -1, FromHz: -1e5, ToHz: 5e5}, verdict.Suspended)
	suspended.HasValue, suspended.Measured, suspended.ConformanceProbability = false, verdict.Value{}, 0
	suspended.CommonUncertainty, suspended.Readings = 0, 0
	return &verdict.Judgement{
		Verdict: verdict.Pass, Grade: "A",
		Findings: []verdict.Finding{
			finding(parttype.MotionalResistance, verdict.Nowhere, verdict.Conforms),
			finding(parttype.DriveResistanceRatio, verdict.Where{DriveStep: 0}, verdict.Violates),
			finding(parttype.OvertoneSuppression, verdict.Where{DriveStep: -1, Order: 3}, verdict.Undecided),
			finding(parttype.OvertoneSuppression, verdict.Where{DriveStep: -1, FrequencyRatio: 6.27}, verdict.Conforms),
			suspended,
		},
		RetestCauses: []verdict.RetestCause{{Cause: verdict.CalibrationExpired, Text: "It expired.", Advice: "Calibrate.", Station: true}},
		Main: &verdict.Main{
			MotionalResonanceHz: v(), ResonanceHz: p(), AntiresonanceHz: p(), ParallelResonanceHz: v(), MotionalResistanceOhm: v(), ResonanceResistanceOhm: p(),
			MotionalInductanceHenry: v(), MotionalCapacitanceFarad: v(), ShuntCapacitanceFarad: v(), QualityFactor: v(), FigureOfMerit: v(),
		},
		Load:          &verdict.Load{LoadCapacitanceFarad: 1e-11, Connection: "series", LoadResonanceHz: v(), LoadResonanceResistanceOhm: v(), PullingSensitivityPPMPerPF: v()},
		Drive:         []verdict.DriveReading{{Step: 0, PowerWatt: v(), MotionalResistanceOhm: v(), MotionalResonanceHz: v()}},
		Modes:         []verdict.ModeReading{{Kind: "overtone", Order: 3, FrequencyHz: v(), ResistanceOhm: v(), SuppressionDB: v(), MultipleRatio: p()}, {Kind: "unwanted", FrequencyHz: v(), ResistanceOhm: v(), SuppressionDB: v()}},
		Observability: []verdict.Observability{{FromHz: next(), ToHz: next(), NarrowestWidthHz: next(), SuppressionDB: next()}},
		Quality:       &verdict.Quality{SNRDecibel: next(), ReducedChiSquare: next(), ResidualCorrelation: 0.25, SettlingTimeConstants: next()},
		Budget:        []verdict.BudgetLine{{Source: "noise", MotionalResonanceHz: next(), MotionalResistanceOhm: next(), MotionalInductanceHenry: next(), ShuntCapacitanceFarad: next()}},
		Remarks:       []string{"A sentence."},

		Disposition: verdict.Passed, ShuntCapacitanceFarad: p(),
		Order: &verdict.Order{
			Order: 3, Probability: 0.75, Candidates: []verdict.OrderCandidate{{Order: 3, Probability: 0.75}}, Text: "On which overtone, and why.",
			Responses: []verdict.OrderedResponse{{Order: 3, FrequencyHz: v(), MultipleRatio: p(), CapacitanceFarad: p(), CapacitanceShare: p()}},
		},
	}
}

// golden compares the JSON form of a message with a file, apart from white space, which the JSON library varies on purpose.
func golden(t *testing.T, file string, asJSON []byte) {
	t.Helper()
	var b bytes.Buffer
	if err := json.Indent(&b, asJSON, "", "  "); err != nil {
		t.Fatal(err)
	}
	b.WriteByte('\n')
	path := filepath.Join("testdata", file)
	if *update {
		if err := os.WriteFile(path, b.Bytes(), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(b.Bytes(), want) {
		t.Errorf("the JSON form differs from %s; got\n%s", path, b.Bytes())
	}
}

// The names that others read: a change of this file is a change of the contract.
func TestJudgementJSONNames(t *testing.T) {
	m := JudgementToProto(fullJudgement(), "revision")
	asJSON, err := protojson.Marshal(m)
	if err != nil {
		t.Fatal(err)
	}
	golden(t, "judgement.json", asJSON)
	// The names of the design's own table, whatever the golden file was last written from.
	var tree map[string]any
	if err := json.Unmarshal(asJSON, &tree); err != nil {
		t.Fatal(err)
	}
	paths := leaves("", tree)
	for _, want := range strings.Fields(`
		verdict=VERDICT_PASS
		findings.quantity findings.where.driveStep findings.where.order findings.where.frequencyRatio findings.where.fromHz findings.where.toHz
		findings.value findings.standardUncertainty findings.unit findings.lower findings.upper findings.conformanceProbability findings.outcome findings.text
		main.motionalResonanceHz.value main.motionalResonanceHz.standardUncertainty main.resonanceHz.value main.motionalResistanceOhm.value
		main.motionalInductanceH.value main.motionalCapacitanceF.value main.shuntCapacitanceF.value main.qualityFactor.value
		load.loadResonanceHz.value load.loadResonanceResistanceOhm.value load.pullingSensitivityPpmPerPf.value
		drive.step drive.powerW.value drive.motionalResistanceOhm.value drive.motionalResonanceHz.value
		modes.kind modes.order modes.frequencyHz.value modes.resistanceOhm.value modes.suppressionDb.value
		observability.fromHz observability.toHz observability.narrowestWidthHz observability.suppressionDb
		retestCauses.cause=calibration_expired retestCauses.text retestCauses.advice
		quality.snrDb quality.reducedChiSquare quality.residualCorrelation quality.settlingTimeConstants`) {
		path, value, hasValue := strings.Cut(want, "=")
		// A step of 0 is a default value and is written where defaults are; here its presence in findings is enough.
		if path == "drive.step" {
			continue
		}
		if got, ok := paths[path]; !ok || (hasValue && !slices.Contains(got, value)) {
			t.Errorf("the JSON form has %q = %v, want %s", path, got, want)
		}
	}
	// Every field of the message is in the example, so that none can be renamed unseen.
	for _, missing := range unset("", m.ProtoReflect()) {
		if !slices.Contains([]string{"scale_unknown", "drive.step"}, missing) {
			t.Errorf("the example leaves %s out", missing)
		}
	}
}

// leaves returns the paths of all scalar values, lists joined, with what stands there.
func leaves(prefix string, v any) map[string][]string {
	all := map[string][]string{}
	add := func(m map[string][]string) {
		for k, v := range m {
			all[k] = append(all[k], v...)
		}
	}
	switch v := v.(type) {
	case map[string]any:
		for k, x := range v {
			add(leaves(strings.TrimPrefix(prefix+"."+k, "."), x))
		}
	case []any:
		for _, x := range v {
			add(leaves(prefix, x))
		}
	default:
		s, _ := v.(string)
		all[prefix] = append(all[prefix], s)
	}
	return all
}

// unset returns the fields that are set in no instance of their message below m.
func unset(prefix string, m protoreflect.Message) []string {
	set, all := map[string]bool{}, map[string]bool{}
	var walk func(prefix string, m protoreflect.Message)
	walk = func(prefix string, m protoreflect.Message) {
		fields := m.Descriptor().Fields()
		for i := range fields.Len() {
			f := fields.Get(i)
			path := strings.TrimPrefix(prefix+"."+string(f.Name()), ".")
			all[path] = true
			if !m.Has(f) {
				continue
			}
			set[path] = true
			switch {
			case f.IsList() && f.Kind() == protoreflect.MessageKind:
				for k := range m.Get(f).List().Len() {
					walk(path, m.Get(f).List().Get(k).Message())
				}
			case f.Kind() == protoreflect.MessageKind:
				walk(path, m.Get(f).Message())
			}
		}
	}
	walk(prefix, m)
	var missing []string
	for path := range all {
		if !set[path] {
			missing = append(missing, path)
		}
	}
	slices.Sort(missing)
	return missing
}

func TestInspectionJSONNames(t *testing.T) {
	locked := true
	r := &inspection.Record{
		Begin: inspection.Begin{
			ID: inspection.ID{0x01, 0x8f, 0x3a, 0x52, 0, 0, 0x70, 0, 0x80, 0, 0, 0, 0, 0, 0, 1}, Purpose: inspection.FirstArticle,
			Unit:    inspection.UnitID{Serial: "TM0000001", Lot: "L2601", Carrier: "C07", Pocket: 12, Attempt: 1},
			Station: "N1", ContactHead: "N1-A", Operator: "op-17", PartType: inspection.PartTypeRef{Name: "TM-25M000-F10", Version: 1}, Calibration: "N1-A-2026-11-30",
			MeasuredAt: time.Date(2026, 11, 30, 9, 12, 44, 5e8, time.UTC), Temperature: &inspection.Temperature{Celsius: 25.1, StandardUncertainty: 0.2},
			ReferenceLock: &locked, AnswerWithin: 50 * time.Millisecond,
		},
		PartType:        inspection.Applied{PartTypeRef: inspection.PartTypeRef{Name: "TM-25M000-F10", Version: 1}, Hash: [32]byte{1}},
		CalibrationHash: [32]byte{2}, ContentHash: [32]byte{3}, Judgement: verdict.Judgement{Verdict: verdict.Retest}, Software: "revision",
		Sequence: math.MaxUint32 + 1, RecordedAt: time.Date(2026, 11, 30, 9, 12, 45, 0, time.UTC), Attempt: 1, Caller: "n1.floor.example",
	}
	asJSON, err := protojson.MarshalOptions{EmitDefaultValues: true}.Marshal(RecordToProto(r))
	if err != nil {
		t.Fatal(err)
	}
	golden(t, "inspection.json", asJSON)
}

// Every field that a judgement has in the domain reaches the wire: a field added there must be added here.
func TestFullJudgementLeavesNothingOut(t *testing.T) {
	for _, path := range zeros("", reflect.ValueOf(*fullJudgement())) {
		switch path {
		case ".ScaleUnknown", ".Findings.Where.DriveStep", ".Drive.Step": // 0 and false are values here
		default:
			t.Errorf("the example has no %s in any place", path)
		}
	}
	back, software, err := JudgementFromProto(JudgementToProto(fullJudgement(), "revision"))
	if err != nil || software != "revision" || !reflect.DeepEqual(back, *fullJudgement()) {
		t.Errorf("came back as %+v, %v", back, err)
	}
}

// zeros returns the paths of fields that are zero in every place where they occur.
func zeros(prefix string, v reflect.Value) []string {
	filled, all := map[string]bool{}, map[string]bool{}
	var walk func(string, reflect.Value)
	walk = func(path string, v reflect.Value) {
		all[path] = true
		if !v.IsZero() {
			filled[path] = true
		}
		switch v.Kind() {
		case reflect.Pointer:
			if !v.IsNil() {
				walk(path, v.Elem())
			}
		case reflect.Slice:
			for i := range v.Len() {
				walk(path, v.Index(i))
			}
		case reflect.Struct:
			for i := range v.NumField() {
				walk(path+"."+v.Type().Field(i).Name, v.Field(i))
			}
		}
	}
	walk(prefix, v)
	var missing []string
	for path := range all {
		if !filled[path] {
			missing = append(missing, path)
		}
	}
	slices.Sort(missing)
	return missing
}
