package rpc

import (
	"context"
	"errors"
	"io"
	"math"
	"strings"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/protobuf/proto"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
	"example.com/admit/service/wire"
)

func TestInspectFromBeginToRecorded(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	u := newUnit("N1", "TM0000001")
	u.sweeps = append(u.sweeps, newSweep(sweep.Unwanted, 9001, 7)) // more than two chunks
	got, err := inspectAll(t.Context(), conn, u.messages())
	if err != nil {
		t.Fatal(err)
	}
	if got.order != "plan judgement recorded " || len(got.plan.GetSweeps()) != 0 {
		t.Errorf("answers came as %q with plan %v, want an empty plan, a judgement, the record", got.order, got.plan)
	}
	if got.judgement.GetVerdict() != pb.Verdict_VERDICT_PASS || got.judgement.GetSoftwareRevision() != "test-revision" {
		t.Errorf("judgement %v", got.judgement)
	}
	r := got.recorded
	if r.GetSequence() != 1 || r.GetAttempt() != 1 || r.GetAlreadyRecorded() || !proto.Equal(r.GetJudgement(), got.judgement) || r.GetRecordedAt() == nil {
		t.Errorf("recorded %v", r)
	}
	kept, ok, err := f.store.Find(t.Context(), u.begin.ID)
	if err != nil || !ok || kept.Caller != Loopback || kept.ContentHash != inspection.ContentHash(&u.begin, u.sweeps) {
		t.Errorf("kept %v %v %+v", ok, err, kept)
	}
	if f.heard.judged != 1 || len(f.heard.recorded) != 1 {
		t.Errorf("the observer heard %d judged and %d recorded, want 1 and 1", f.heard.judged, len(f.heard.recorded))
	}
}

func TestResendIsHarmlessAndOtherContentIsRefused(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	u := newUnit("N1", "TM0000001")
	first := mustRecord(t, conn, u)
	for range 3 {
		got, err := inspectAll(t.Context(), conn, u.messages())
		if err != nil {
			t.Fatal(err)
		}
		if !got.recorded.GetAlreadyRecorded() || got.recorded.GetSequence() != first.GetSequence() || !proto.Equal(got.recorded.GetJudgement(), first.GetJudgement()) {
			t.Errorf("again: %v, want the first answer %v", got.recorded, first)
		}
	}
	logged := f.log.since()
	u.sweeps[0].Re[3] += 1e-9
	_, err := inspectAll(t.Context(), conn, u.messages())
	wantRefused(t, err, codes.AlreadyExists, "inspection")
	if !strings.Contains(logged(), "msg=security event=inspection_refused") {
		t.Errorf("no security line for other content, the log has\n%s", logged())
	}
	if f.store.Last() != 1 || len(f.heard.recorded) != 1 {
		t.Errorf("%d records, %d heard, want 1 and 1", f.store.Last(), len(f.heard.recorded))
	}
}

// Two streams with the same inspection at once: one record, one count, both answered.
func TestSameInspectionAtOnce(t *testing.T) {
	f := newFloor(t, nil)
	u := newUnit("N1", "TM0000001")
	type result struct {
		r   *pb.Recorded
		err error
	}
	results := make(chan result)
	const callers = 20
	for range callers {
		conn := f.dial()
		go func() {
			got, err := inspectAll(t.Context(), conn, u.messages())
			results <- result{got.recorded, err}
		}()
	}
	fresh := 0
	for range callers {
		got := <-results
		if got.err != nil {
			t.Error(got.err)
		}
		if !got.r.GetAlreadyRecorded() {
			fresh++
		}
	}
	if fresh != 1 || f.store.Last() != 1 || len(f.heard.recorded) != 1 {
		t.Errorf("%d fresh answers, %d records, %d heard; want 1 of each", fresh, f.store.Last(), len(f.heard.recorded))
	}
}

// Every refusal names its field, records nothing, and leaves the connection working.
func TestInspectRefusals(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	begin := func(change func(*pb.Begin)) func(m []*pb.InspectRequest) []*pb.InspectRequest {
		return func(m []*pb.InspectRequest) []*pb.InspectRequest { change(m[0].GetBegin()); return m }
	}
	header := func(change func(*pb.SweepHeader)) func(m []*pb.InspectRequest) []*pb.InspectRequest {
		return func(m []*pb.InspectRequest) []*pb.InspectRequest { change(m[1].GetHeader()); return m }
	}
	samples := func(change func(*pb.SweepSamples)) func(m []*pb.InspectRequest) []*pb.InspectRequest {
		return func(m []*pb.InspectRequest) []*pb.InspectRequest { change(m[2].GetSamples()); return m }
	}
	nan := func(v []float64) { v[1] = v[1] / 0 * 0 }
	for _, c := range []struct {
		name   string
		change func([]*pb.InspectRequest) []*pb.InspectRequest
		code   codes.Code
		field  string
	}{
		{"nothing at all", func([]*pb.InspectRequest) []*pb.InspectRequest { return nil }, codes.InvalidArgument, "begin"},
		{"an empty message first", func(m []*pb.InspectRequest) []*pb.InspectRequest {
			return append([]*pb.InspectRequest{{}}, m...)
		}, codes.InvalidArgument, "begin"},
		{"header first", func(m []*pb.InspectRequest) []*pb.InspectRequest { return m[1:] }, codes.InvalidArgument, "begin"},
		{"begin twice", func(m []*pb.InspectRequest) []*pb.InspectRequest { return append(m[:1:1], m...) }, codes.InvalidArgument, "begin"},
		{"an empty message later", func(m []*pb.InspectRequest) []*pb.InspectRequest {
			return append(m[:1:1], &pb.InspectRequest{})
		}, codes.InvalidArgument, "message"},
		{"samples without header", func(m []*pb.InspectRequest) []*pb.InspectRequest { return append(m[:1:1], m[2:]...) }, codes.InvalidArgument, "samples"},
		{"header within a sweep", func(m []*pb.InspectRequest) []*pb.InspectRequest { return append(m[:2:2], m[1:]...) }, codes.InvalidArgument, "header"},
		{"end within a sweep", func(m []*pb.InspectRequest) []*pb.InspectRequest { return append(m[:2:2], m[3]) }, codes.InvalidArgument, "samples"},
		{"no end", func(m []*pb.InspectRequest) []*pb.InspectRequest { return m[:3] }, codes.InvalidArgument, "end"},
		{"samples beyond the header", func(m []*pb.InspectRequest) []*pb.InspectRequest {
			return append(m[:3:3], m[2:]...)
		}, codes.InvalidArgument, "samples"},
		{"wrong index", header(func(h *pb.SweepHeader) { h.Index = 1 }), codes.InvalidArgument, "header.index"},
		{"no role", header(func(h *pb.SweepHeader) { h.Role = 0 }), codes.InvalidArgument, "header.role"},
		{"no quantity", header(func(h *pb.SweepHeader) { h.Quantity = 0 }), codes.InvalidArgument, "header.quantity"},
		{"grid of another size", header(func(h *pb.SweepHeader) { h.Grid.Points++ }), codes.InvalidArgument, "header.grid.points"},
		{"no points", header(func(h *pb.SweepHeader) { h.Points = 0; h.Grid.Points = 0 }), codes.InvalidArgument, "header.points"},
		{"frequency ratio that is no number", header(func(h *pb.SweepHeader) {
			h.Role, h.Order, h.FrequencyRatio = pb.SweepRole_SWEEP_ROLE_OVERTONE, ptr(uint32(3)), ptr(-1.0)
		}), codes.InvalidArgument, "header.frequency_ratio"},
		{"an infinite sample", samples(func(s *pb.SweepSamples) { s.Re[5] = math.Inf(1) }), codes.InvalidArgument, "sweeps[0]"},
		{"a sample that is no number", samples(func(s *pb.SweepSamples) { nan(s.Re) }), codes.InvalidArgument, "sweeps[0]"},
		{"frequencies beside a grid", samples(func(s *pb.SweepSamples) { s.FrequencyHz = s.Re }), codes.InvalidArgument, "samples"},
		{"one imaginary part too few", samples(func(s *pb.SweepSamples) { s.Im = s.Im[1:] }), codes.InvalidArgument, "samples"},
		{"an id that is none", begin(func(b *pb.Begin) { b.InspectionId = "1" }), codes.InvalidArgument, "begin.inspection"},
		{"an id of version 4", begin(func(b *pb.Begin) { b.InspectionId = "018f3a52-0000-4000-8000-000000000000" }), codes.InvalidArgument, "begin.inspection"},
		{"no station", begin(func(b *pb.Begin) { b.Station = "" }), codes.InvalidArgument, "begin.station"},
		{"no unit", begin(func(b *pb.Begin) { b.Unit = nil }), codes.InvalidArgument, "begin.unit"},
		{"no time", begin(func(b *pb.Begin) { b.MeasuredAt = nil }), codes.InvalidArgument, "begin.measured_at"},
		{"an unknown purpose", begin(func(b *pb.Begin) { b.Purpose = 99 }), codes.InvalidArgument, "begin.purpose"},
		{"unknown part type", begin(func(b *pb.Begin) { b.PartType = "TM-99M000-F10" }), codes.FailedPrecondition, "begin.part_type"},
		{"unknown version", begin(func(b *pb.Begin) { b.PartTypeVersion = 7 }), codes.FailedPrecondition, "begin.part_type"},
		{"unknown calibration", begin(func(b *pb.Begin) { b.CalibrationId = "N1-A-2026-11-30" }), codes.FailedPrecondition, "begin.calibration"},
		{"offline judgement with a value that is no number", begin(func(b *pb.Begin) {
			v := []float64{0, 1}
			nan(v)
			b.OfflineJudgement = &pb.Judgement{Verdict: pb.Verdict_VERDICT_PASS, Findings: []*pb.Finding{{Quantity: "motional_resistance", Value: &v[1]}}}
		}), codes.InvalidArgument, "begin.offline_judgement.findings[0].value"},
		{"another hash", func(m []*pb.InspectRequest) []*pb.InspectRequest { m[3].GetEnd().ContentSha256[0] ^= 1; return m }, codes.InvalidArgument, "content_sha256"},
		{"a short hash", func(m []*pb.InspectRequest) []*pb.InspectRequest {
			m[3].GetEnd().ContentSha256 = []byte{1}
			return m
		}, codes.InvalidArgument, "end.content_sha256"},
	} {
		t.Run(c.name, func(t *testing.T) {
			before := f.store.Last()
			_, err := inspectAll(t.Context(), conn, c.change(newUnit("N1", "TM0000002").messages()))
			wantRefused(t, err, c.code, c.field)
			if f.store.Last() != before {
				t.Error("the refused inspection was recorded")
			}
			if r := mustRecord(t, conn, newUnit("N1", "TM0000003")); r.GetSequence() != before+1 {
				t.Errorf("the next inspection on the connection got sequence %d, want %d", r.GetSequence(), before+1)
			}
		})
	}
}

func TestStoreThatCannotRecordSaysWhenToTryAgain(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	for _, c := range []struct {
		kind   inspection.Kind
		code   codes.Code
		reason string
	}{{inspection.Busy, codes.ResourceExhausted, "BUSY"}, {inspection.Unavailable, codes.Unavailable, "UNAVAILABLE"}} {
		f.store.Break(inspection.Faultf(c.kind, "store", "no room on the disk"))
		u := newUnit("N1", "TM0000001")
		got, err := inspectAll(t.Context(), conn, u.messages())
		r := wantRefused(t, err, c.code, "store")
		if r.reason != c.reason || r.retry <= 0 {
			t.Errorf("reason %q, retry after %v; want %q and a delay", r.reason, r.retry, c.reason)
		}
		if got.recorded != nil {
			t.Errorf("acknowledged without a record: %v", got.recorded)
		}
		f.store.Break(nil)
		mustRecord(t, conn, u)
	}
}

func TestPanicIsLoggedWithItsStackAndTellsNothing(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	logged := f.log.since()
	u := newUnit("N1", "TM0000001")
	u.begin.Unit.Lot = "PANIC"
	_, err := inspectAll(t.Context(), conn, u.messages())
	if r := refusalOf(t, err); r.code != codes.Internal || strings.Contains(r.text, "defect") || strings.Contains(r.text, "goroutine") {
		t.Errorf("told %v, want Internal without detail", err)
	}
	if text := logged(); !strings.Contains(text, "call_panicked") || !strings.Contains(text, "a defect in the judge") || !strings.Contains(text, "judgeByLot") {
		t.Errorf("the log has no panic with its stack:\n%s", text)
	}
	mustRecord(t, conn, newUnit("N1", "TM0000002"))
}

func TestBrokenInvariantTellsNothing(t *testing.T) {
	f := newFloor(t, func(o *Options) {
		o.Desk.Judge = judgeFunc(func(context.Context, *inspection.Case) (verdict.Judgement, error) {
			return verdict.Judgement{}, context.Canceled // the judge's own, not the caller's
		})
	})
	_, err := inspectAll(t.Context(), f.dial(), newUnit("N1", "TM0000001").messages())
	if c := refusalOf(t, err).code; c != codes.Canceled {
		t.Errorf("code %v, want Canceled", c)
	}
}

func TestDeadlineEndsAnInspection(t *testing.T) {
	judging := make(chan struct{})
	f := newFloor(t, func(o *Options) {
		o.Desk.Judge = judgeFunc(func(ctx context.Context, _ *inspection.Case) (verdict.Judgement, error) {
			close(judging)
			<-ctx.Done()
			return verdict.Judgement{}, ctx.Err()
		})
	})
	ctx, cancel := context.WithTimeout(t.Context(), 200*time.Millisecond)
	defer cancel()
	_, err := inspectAll(ctx, f.dial(), newUnit("N1", "TM0000001").messages())
	if c := refusalOf(t, err).code; c != codes.DeadlineExceeded {
		t.Errorf("code %v, want DeadlineExceeded", c)
	}
	<-judging
	eventually(t, "the stream is gone", func() bool { return f.server.Streams() == 0 })
	if f.store.Last() != 0 {
		t.Error("recorded after its deadline")
	}
}

func TestChunksChangeNothing(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	var first *pb.Judgement
	for _, size := range []int{1, 7, 100, 401} {
		u := newUnit("N1", "TM0000001")
		m := u.messages()
		whole := m[2].GetSamples()
		cut := append([]*pb.InspectRequest{}, m[:2]...)
		for from := 0; from < 401; from += size {
			to := min(from+size, 401)
			cut = append(cut, &pb.InspectRequest{Message: &pb.InspectRequest_Samples{Samples: &pb.SweepSamples{Re: whole.GetRe()[from:to], Im: whole.GetIm()[from:to]}}})
		}
		got, err := inspectAll(t.Context(), conn, append(cut, m[3]))
		if err != nil {
			t.Fatalf("chunks of %d: %v", size, err)
		}
		if first == nil {
			first = got.judgement
		}
		if !proto.Equal(first, got.judgement) {
			t.Errorf("chunks of %d: another judgement", size)
		}
	}
}

func TestPublishCalibration(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	c := newCalibration("N1-A-2026-11-30", "N1-A")
	send := func(change func(m []*pb.PublishCalibrationRequest) []*pb.PublishCalibrationRequest) (*pb.PublishCalibrationResponse, error) {
		m := []*pb.PublishCalibrationRequest{{Message: &pb.PublishCalibrationRequest_Calibration{Calibration: wire.CalibrationToProto(c, false)}}}
		for _, s := range wire.StandardSamplesToProto(c) {
			m = append(m, &pb.PublishCalibrationRequest{Message: &pb.PublishCalibrationRequest_Samples{Samples: s}})
		}
		if change != nil {
			m = change(m)
		}
		stream, err := pb.NewStationServiceClient(conn).PublishCalibration(t.Context())
		if err != nil {
			return nil, err
		}
		for _, one := range m {
			if stream.Send(one) != nil {
				break
			}
		}
		return stream.CloseAndRecv()
	}
	type messages = []*pb.PublishCalibrationRequest
	head := func(change func(*pb.Calibration)) func(m messages) messages {
		return func(m messages) messages { change(m[0].GetCalibration()); return m }
	}
	for _, r := range []struct {
		name   string
		change func(messages) messages
		field  string
	}{
		{"nothing", func(messages) messages { return nil }, "calibration"},
		{"samples first", func(m messages) messages { return m[1:] }, "calibration"},
		{"calibration twice", func(m messages) messages { return append(m[:1:1], m...) }, "calibration"},
		{"an empty message", func(m messages) messages { return append(m[:1:1], &pb.PublishCalibrationRequest{}) }, "message"},
		{"a standard too few", func(m messages) messages { return m[:3] }, "samples"},
		{"a piece too many", func(m messages) messages { return append(m, m[3]) }, "samples"},
		{"standards out of order", func(m messages) messages { m[1], m[2] = m[2], m[1]; return m }, "samples.standard_index"},
		{"an index beyond", func(m messages) messages { m[3].GetSamples().StandardIndex = 3; return m }, "samples.standard_index"},
		{"no id", head(func(c *pb.Calibration) { c.CalibrationId = "" }), "calibration.calibration_id"},
		{"a long id", head(func(c *pb.Calibration) { c.CalibrationId = strings.Repeat("x", 129) }), "calibration.calibration_id"},
		{"no contact head", head(func(c *pb.Calibration) { c.ContactHead = "" }), "calibration.contact_head"},
		{"no network", head(func(c *pb.Calibration) { c.FixtureNetwork = 0 }), "calibration.fixture_network"},
		{"no time", head(func(c *pb.Calibration) { c.TakenAt = nil }), "calibration.taken_at"},
		{"no validity", head(func(c *pb.Calibration) { c.ValidForS = 0 }), "calibration.valid_for_s"},
		{"no reference impedance", head(func(c *pb.Calibration) { c.ReferenceImpedanceOhm = 0 }), "calibration.reference_impedance_ohm"},
		{"a drift that is no number", head(func(c *pb.Calibration) { v := 0.0; c.Drift.GainDb = v / v }), "calibration.drift.gain_db"},
		{"too many points", head(func(c *pb.Calibration) { c.Standards[0].Points = sweep.MaxPoints + 1 }), "calibration.standards[0].points"},
		{"no points", head(func(c *pb.Calibration) { c.Standards[1].Points = 0 }), "calibration.standards[1].points"},
		{"too many standards", head(func(c *pb.Calibration) {
			for range 100 {
				c.Standards = append(c.Standards, c.GetStandards()[0])
			}
		}), "calibration.standards"},
	} {
		t.Run(r.name, func(t *testing.T) {
			_, err := send(r.change)
			wantRefused(t, err, codes.InvalidArgument, r.field)
		})
	}
	want := inspection.CalibrationHash(c)
	for _, already := range []bool{false, true} {
		got, err := send(nil)
		if err != nil || string(got.GetSha256()) != string(want[:]) || got.GetAlreadyPublished() != already {
			t.Fatalf("published: %v, %v; want already %v and the hash of the content", got, err, already)
		}
	}
	back, err := readCalibration(t, conn, "N1-A-2026-11-30")
	if err != nil || inspection.CalibrationHash(back) != want {
		t.Errorf("read back as %+v, %v; want the content that was published", back, err)
	}
	_, err = readCalibration(t, conn, "N1-A-2026-12-01")
	wantRefused(t, err, codes.NotFound, "calibration")
	_, err = readCalibration(t, conn, "")
	wantRefused(t, err, codes.InvalidArgument, "calibration_id")
	logged := f.log.since()
	_, err = send(head(func(c *pb.Calibration) { c.ValidForS++ }))
	wantRefused(t, err, codes.AlreadyExists, "calibration")
	if !strings.Contains(logged(), "event=calibration_refused") {
		t.Error("no security line for a changed calibration")
	}
	u := newUnit("N1", "TM0000001")
	u.begin.Calibration = "N1-A-2026-11-30"
	mustRecord(t, conn, u)
	kept, _, err := f.store.Find(t.Context(), u.begin.ID)
	if err != nil || kept.CalibrationHash != want {
		t.Errorf("the record is pinned to calibration %x, %v; want %x", kept.CalibrationHash, err, want)
	}
}

// readCalibration puts a calibration together from its pieces.
func readCalibration(t *testing.T, conn *grpc.ClientConn, id string) (*network.Calibration, error) {
	t.Helper()
	stream, err := pb.NewStationServiceClient(conn).ReadCalibration(t.Context(), &pb.ReadCalibrationRequest{CalibrationId: id})
	if err != nil {
		return nil, err
	}
	var c *network.Calibration
	for {
		m, err := stream.Recv()
		if errors.Is(err, io.EOF) {
			return c, nil
		}
		if err != nil {
			return nil, err
		}
		if head := m.GetCalibration(); head != nil {
			c, err = wire.CalibrationFromProto(head)
		} else {
			err = wire.AddStandardSamples(c, m.GetSamples())
		}
		if err != nil {
			return nil, err
		}
	}
}
