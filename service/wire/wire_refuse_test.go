package wire

import (
	"errors"
	"math"
	"testing"

	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// wantFault fails unless err is a malformed fault of the field.
func wantFault(t *testing.T, name string, err error, field string) {
	t.Helper()
	var f *inspection.Fault
	if !errors.As(err, &f) || f.Kind != inspection.Malformed || f.Field != field {
		t.Errorf("%s: %v, want malformed with field %q", name, err, field)
	}
}

func TestBeginRefusals(t *testing.T) {
	for _, c := range []struct {
		name, field string
		change      func(*pb.Begin)
	}{
		{"no id", "inspection", func(b *pb.Begin) { b.InspectionId = "" }},
		{"capitals", "inspection", func(b *pb.Begin) { b.InspectionId = "018F3A52-0000-7000-8000-000000000000" }},
		{"without hyphens", "inspection", func(b *pb.Begin) { b.InspectionId = "018f3a52000070008000000000000000" }},
		{"hyphens elsewhere", "inspection", func(b *pb.Begin) { b.InspectionId = "018f3a520-000-7000-8000-000000000000" }},
		{"version 1", "inspection", func(b *pb.Begin) { b.InspectionId = "018f3a52-0000-1000-8000-000000000000" }},
		{"purpose", "purpose", func(b *pb.Begin) { b.Purpose = 7 }},
		{"pocket", "unit.pocket", func(b *pb.Begin) { b.Unit = &pb.Unit{Pocket: 1000001} }},
		{"attempt", "unit.attempt", func(b *pb.Begin) { b.Unit = &pb.Unit{Attempt: math.MaxUint32} }},
		{"version", "part_type_version", func(b *pb.Begin) { b.PartTypeVersion = math.MaxUint32 }},
		{"time", "measured_at", func(b *pb.Begin) { b.MeasuredAt = &timestamppb.Timestamp{Nanos: -1} }},
		{"wish that is no number", "answer_within_s", func(b *pb.Begin) { b.AnswerWithinS = math.NaN() }},
		{"wish below 0", "answer_within_s", func(b *pb.Begin) { b.AnswerWithinS = -1e-9 }},
		{"wish without end", "answer_within_s", func(b *pb.Begin) { b.AnswerWithinS = math.Inf(1) }},
		{"offline without verdict", "offline_judgement.verdict", func(b *pb.Begin) { b.OfflineJudgement = &pb.Judgement{} }},
		{"offline with an infinite estimate", "offline_judgement.main.motional_resonance_hz.standard_uncertainty", func(b *pb.Begin) {
			b.OfflineJudgement = &pb.Judgement{Verdict: pb.Verdict_VERDICT_PASS, Main: &pb.MotionalParameters{MotionalResonanceHz: &pb.Estimate{StandardUncertainty: math.Inf(-1)}}}
		}},
		{"offline with a limit that is no number", "offline_judgement.findings[1].upper", func(b *pb.Begin) {
			b.OfflineJudgement = &pb.Judgement{Verdict: pb.Verdict_VERDICT_PASS, Findings: []*pb.Finding{{}, {Upper: ptr(math.NaN())}}}
		}},
	} {
		b := &pb.Begin{InspectionId: "018f3a52-0000-7000-8000-000000000000"}
		if _, err := BeginFromProto(b); err != nil {
			t.Fatal(err)
		}
		c.change(b)
		_, err := BeginFromProto(b)
		wantFault(t, c.name, err, c.field)
	}
}

func TestHeaderRefusals(t *testing.T) {
	for _, c := range []struct {
		name, field string
		change      func(*pb.SweepHeader)
	}{
		{"no role", "role", func(h *pb.SweepHeader) { h.Role = 0 }},
		{"no quantity", "quantity", func(h *pb.SweepHeader) { h.Quantity = 0 }},
		{"unknown phase", "source_phase", func(h *pb.SweepHeader) { h.SourcePhase = 3 }},
		{"no points", "points", func(h *pb.SweepHeader) { h.Points = 0 }},
		{"too many points", "points", func(h *pb.SweepHeader) { h.Points = sweep.MaxPoints + 1 }},
		{"order", "order", func(h *pb.SweepHeader) { h.Order = ptr(uint32(1001)) }},
		{"ratio that is no number", "frequency_ratio", func(h *pb.SweepHeader) { h.FrequencyRatio = ptr(math.NaN()) }},
		{"ratio below 0", "frequency_ratio", func(h *pb.SweepHeader) { h.FrequencyRatio = ptr(-6.27) }},
		{"ratio 0", "frequency_ratio", func(h *pb.SweepHeader) { h.FrequencyRatio = ptr(0.0) }},
		{"drive sweep without step", "drive_step", func(h *pb.SweepHeader) { h.Role = pb.SweepRole_SWEEP_ROLE_DRIVE }},
		{"dwell", "dwell_s", func(h *pb.SweepHeader) { h.DwellS = ptr(-1.0) }},
		{"averaging", "averaging_s", func(h *pb.SweepHeader) { h.AveragingS = ptr(math.NaN()) }},
		{"lead-in", "lead_in_s", func(h *pb.SweepHeader) { h.LeadInS = ptr(1e300) }},
		{"grid", "grid.points", func(h *pb.SweepHeader) { h.Grid = &pb.Grid{Points: 8} }},
	} {
		h := &pb.SweepHeader{Role: pb.SweepRole_SWEEP_ROLE_MAIN, Quantity: pb.SampleQuantity_SAMPLE_QUANTITY_S21, Points: 9}
		if _, err := HeaderFromProto(h); err != nil {
			t.Fatal(err)
		}
		c.change(h)
		_, err := HeaderFromProto(h)
		wantFault(t, c.name, err, c.field)
	}
}

func TestChunkRefusals(t *testing.T) {
	two := []float64{1, 2}
	for _, c := range []struct {
		name     string
		quantity sweep.Quantity
		grid     bool
		chunk    *pb.SweepSamples
		ok       bool
	}{
		{"complex with frequencies", sweep.S21, false, &pb.SweepSamples{FrequencyHz: two, Re: two, Im: two}, true},
		{"complex on a grid", sweep.S11, true, &pb.SweepSamples{Re: two, Im: two}, true},
		{"magnitudes on a grid", sweep.S21Magnitude, true, &pb.SweepSamples{Re: two}, true},
		{"nothing", sweep.S21, true, &pb.SweepSamples{}, false},
		{"frequencies beside a grid", sweep.S21, true, &pb.SweepSamples{FrequencyHz: two, Re: two, Im: two}, false},
		{"no frequencies", sweep.S21, false, &pb.SweepSamples{Re: two, Im: two}, false},
		{"magnitudes with imaginary parts", sweep.S21Magnitude, true, &pb.SweepSamples{Re: two, Im: two}, false},
		{"complex without imaginary parts", sweep.S21, true, &pb.SweepSamples{Re: two}, false},
		{"imaginary parts only", sweep.S21, true, &pb.SweepSamples{Im: two}, false},
		{"too many", sweep.S21, true, &pb.SweepSamples{Re: make([]float64, 10), Im: make([]float64, 10)}, false},
	} {
		h := inspection.SweepHeader{Points: 9}
		h.Quantity = c.quantity
		if c.grid {
			h.Grid = &sweep.Grid{StartHz: 1, StopHz: 2, Points: 9}
		}
		var a Assembly
		a.Start(h)
		_, _, err := a.Add(c.chunk)
		if c.ok && err != nil {
			t.Errorf("%s: %v", c.name, err)
		}
		if !c.ok {
			wantFault(t, c.name, err, "samples")
		}
	}
}

func TestCalibrationRefusals(t *testing.T) {
	for _, c := range []struct {
		name, field string
		change      func(*pb.Calibration)
	}{
		{"no network", "fixture_network", func(c *pb.Calibration) { c.FixtureNetwork = 0 }},
		{"time", "taken_at", func(c *pb.Calibration) { c.TakenAt = &timestamppb.Timestamp{Seconds: math.MaxInt64} }},
		{"validity", "valid_for_s", func(c *pb.Calibration) { c.ValidForS = math.Inf(1) }},
		{"averaging", "receiver_noise.averaging_s", func(c *pb.Calibration) { c.ReceiverNoise = &pb.ReceiverNoise{AveragingS: ptr(-1.0)} }},
		{"kind of standard", "standards.kind", func(c *pb.Calibration) { c.Standards = []*pb.Standard{{}} }},
	} {
		m := &pb.Calibration{FixtureNetwork: pb.FixtureNetwork_FIXTURE_NETWORK_PI_NETWORK}
		c.change(m)
		_, err := CalibrationFromProto(m)
		wantFault(t, c.name, err, c.field)
	}
	one := &network.Calibration{Standards: make([]network.Standard, 2)}
	v := []float64{1}
	for _, c := range []struct {
		name, field string
		m           *pb.StandardSamples
	}{
		{"index", "standard_index", &pb.StandardSamples{StandardIndex: 2, Samples: &pb.SweepSamples{FrequencyHz: v, Re: v, Im: v}}},
		{"nothing", "samples", &pb.StandardSamples{}},
		{"no real parts", "samples", &pb.StandardSamples{Samples: &pb.SweepSamples{FrequencyHz: v, Im: v}}},
		{"two imaginary parts", "samples", &pb.StandardSamples{Samples: &pb.SweepSamples{FrequencyHz: v, Re: v, Im: []float64{1, 2}}}},
		{"too many", "samples", &pb.StandardSamples{Samples: &pb.SweepSamples{FrequencyHz: make([]float64, sweep.MaxPoints+1), Re: make([]float64, sweep.MaxPoints+1)}}},
	} {
		wantFault(t, c.name, AddStandardSamples(one, c.m), c.field)
	}
	if err := AddStandardSamples(one, &pb.StandardSamples{Samples: &pb.SweepSamples{FrequencyHz: v, Re: v}}); err != nil {
		t.Fatal(err)
	}
	wantFault(t, "complex after magnitudes", AddStandardSamples(one, &pb.StandardSamples{Samples: &pb.SweepSamples{FrequencyHz: v, Re: v, Im: v}}), "samples.im")
}

// What a calibration does not state takes the contract's defaults.
func TestCalibrationDefaults(t *testing.T) {
	for network4, want := range map[pb.FixtureNetwork]float64{ // source: calibration.proto, nominal_termination_ohm
		pb.FixtureNetwork_FIXTURE_NETWORK_PI_NETWORK: 25, pb.FixtureNetwork_FIXTURE_NETWORK_SERIES_THROUGH: 100,
		pb.FixtureNetwork_FIXTURE_NETWORK_REFLECTION: 50, pb.FixtureNetwork_FIXTURE_NETWORK_HIGH_IMPEDANCE: 20000,
	} {
		c, err := CalibrationFromProto(&pb.Calibration{FixtureNetwork: network4})
		if err != nil {
			t.Fatal(err)
		}
		if c.NominalTerminationOhm != want || c.DriftGainDB != 0.02 || c.DriftPhaseDeg != 0.1 || c.ContactUncertaintyOhm != 0.05 ||
			c.SourceLevelUncertaintyDB != 0.1 || c.SourceLevelOffsetDB != 0 || c.ReferenceClockUncertaintyPPM != 0 || c.ReceiverNoise != nil {
			t.Errorf("%v: %+v", network4, c)
		}
	}
}

func TestRecordRefusals(t *testing.T) {
	for _, c := range []struct {
		name, field string
		change      func(*pb.Inspection)
	}{
		{"begin", "begin.inspection", func(m *pb.Inspection) { m.Begin.InspectionId = "" }},
		{"hash of the part type", "part_type.sha256", func(m *pb.Inspection) { m.PartType = &pb.PartTypeReference{Sha256: []byte{1}} }},
		{"hash of the calibration", "calibration.sha256", func(m *pb.Inspection) { m.Calibration = &pb.CalibrationReference{Sha256: make([]byte, 33)} }},
		{"hash of the content", "content_sha256", func(m *pb.Inspection) { m.ContentSha256 = make([]byte, 31) }},
		{"sweep", "sweeps.role", func(m *pb.Inspection) { m.Sweeps = []*pb.SweepHeader{{}} }},
		{"judgement", "judgement.verdict", func(m *pb.Inspection) { m.Judgement.Verdict = 9 }},
		{"number of the judgement", "judgement.quality.snr_db", func(m *pb.Inspection) { m.Judgement.Quality = &pb.SweepQuality{SnrDb: math.NaN()} }},
	} {
		m := &pb.Inspection{Begin: &pb.Begin{InspectionId: "018f3a52-0000-7000-8000-000000000000"}, Judgement: &pb.Judgement{Verdict: pb.Verdict_VERDICT_FAIL}}
		if _, err := RecordFromProto(m); err != nil {
			t.Fatal(err)
		}
		c.change(m)
		_, err := RecordFromProto(m)
		wantFault(t, c.name, err, c.field)
	}
}

// Every named value of the domain has its own on the wire and the reverse: a value added to one side only is a defect.
func TestNamedValuesArePaired(t *testing.T) {
	paired(t, purposes, inspection.Purposes(), pb.Purpose_name)
	paired(t, roles, sweep.Roles(), pb.SweepRole_name)
	paired(t, quantities, sweep.Quantities(), pb.SampleQuantity_name)
	paired(t, phases, sweep.SourcePhases(), pb.SourcePhase_name)
	paired(t, networks, network.Kinds(), pb.FixtureNetwork_name)
	paired(t, standards, network.StandardKinds(), pb.StandardKind_name)
	paired(t, verdicts, verdict.Verdicts(), pb.Verdict_name)
	if Verdict(verdict.Fail) != pb.Verdict_VERDICT_FAIL || NetworkToProto(network.Reflection) != pb.FixtureNetwork_FIXTURE_NETWORK_REFLECTION {
		t.Error("a pair is crossed")
	}
	if p, err := Purpose(pb.Purpose_PURPOSE_UNSPECIFIED); err != nil || p != inspection.Production {
		t.Errorf("a purpose that is not said is %v, %v; want production", p, err)
	}
}

func paired[D ~string, W ~int32](t *testing.T, tb table[D, W], all []D, names map[int32]string) {
	t.Helper()
	if len(names) != len(all)+1 {
		t.Errorf("%s: %d values in the domain, %d on the wire besides the unspecified one", tb.field, len(all), len(names)-1)
	}
	seen := map[W]D{}
	for _, d := range all {
		w := tb.toWire(d)
		if w == 0 {
			t.Errorf("%s %q has no value on the wire", tb.field, d)
		}
		if other, twice := seen[w]; twice {
			t.Errorf("%s: %q and %q are one value on the wire", tb.field, d, other)
		}
		seen[w] = d
		if back, err := tb.toDomain(w); err != nil || back != d {
			t.Errorf("%s: %q came back as %q, %v", tb.field, d, back, err)
		}
	}
}
