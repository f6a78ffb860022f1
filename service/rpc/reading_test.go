package rpc

import (
	"errors"
	"fmt"
	"io"
	"math"
	"strings"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
	"example.com/admit/service/wire"
)

func TestGetAndListInspections(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	client := pb.NewInspectionServiceClient(conn)
	var units []*unit
	for i := range 25 {
		u := newUnit([]string{"N1", "N2"}[i%2], fmt.Sprintf("TM%07d", i))
		u.begin.MeasuredAt = u.begin.MeasuredAt.Add(time.Duration(i) * time.Minute)
		if i%5 == 0 {
			u.begin.Unit.Lot = "L2602"
		}
		mustRecord(t, conn, u)
		units = append(units, u)
	}
	got, err := client.GetInspection(t.Context(), &pb.GetInspectionRequest{InspectionId: units[3].begin.ID.String()})
	if err != nil || got.GetInspection().GetSequence() != 4 || got.GetInspection().GetBegin().GetUnit().GetSerial() != "TM0000003" || got.GetInspection().GetCaller() != Loopback {
		t.Errorf("got %v, %v", got, err)
	}
	_, err = client.GetInspection(t.Context(), &pb.GetInspectionRequest{InspectionId: newID().String()})
	wantRefused(t, err, codes.NotFound, "inspection_id")
	_, err = client.GetInspection(t.Context(), &pb.GetInspectionRequest{InspectionId: strings.Repeat("x", 100000)})
	wantRefused(t, err, codes.InvalidArgument, "inspection_id.inspection")

	at := units[0].begin.MeasuredAt
	for _, c := range []struct {
		name string
		r    *pb.ListInspectionsRequest
		want string // sequences, newest first
	}{
		{"all", &pb.ListInspectionsRequest{}, "25 24 23 22 21 20 19 18 17 16 15 14 13 12 11 10 9 8 7 6 5 4 3 2 1"},
		{"by serial", &pb.ListInspectionsRequest{Serial: "TM0000011"}, "12"},
		{"by lot", &pb.ListInspectionsRequest{Lot: "L2602"}, "21 16 11 6 1"},
		{"by lot and station", &pb.ListInspectionsRequest{Lot: "L2602", Station: "N2"}, "16 6"},
		{"by time", &pb.ListInspectionsRequest{MeasuredFrom: stamp(at.Add(2 * time.Minute)), MeasuredUntil: stamp(at.Add(5 * time.Minute))}, "5 4 3"},
		{"nothing", &pb.ListInspectionsRequest{Station: "S4"}, ""},
	} {
		for _, size := range []int32{1, 3, 5, 25, 0} {
			c.r.PageSize, c.r.PageToken = size, ""
			var sequences []string
			for pages := 0; ; pages++ {
				page, err := client.ListInspections(t.Context(), c.r)
				if err != nil {
					t.Fatal(c.name, err)
				}
				if n := len(page.GetInspections()); size > 0 && n > int(size) {
					t.Errorf("%s: a page of %d, want at most %d", c.name, n, size)
				}
				for _, i := range page.GetInspections() {
					sequences = append(sequences, fmt.Sprint(i.GetSequence()))
				}
				if c.r.PageToken = page.GetNextPageToken(); c.r.PageToken == "" || pages > 30 {
					break
				}
			}
			if s := strings.Join(sequences, " "); s != c.want {
				t.Errorf("%s in pages of %d: %s, want %s", c.name, size, s, c.want)
			}
		}
	}
	first, err := client.ListInspections(t.Context(), &pb.ListInspectionsRequest{PageSize: 2, Lot: "L2602"})
	if err != nil {
		t.Fatal(err)
	}
	for field, r := range map[string]*pb.ListInspectionsRequest{
		"page_size":     {PageSize: 1001},
		"page_token":    {PageToken: first.GetNextPageToken(), Lot: "L2601"},
		"serial":        {Serial: strings.Repeat("x", 129)},
		"station":       {Station: "N1\n"},
		"measured_from": {MeasuredFrom: &tooLate},
	} {
		_, err := client.ListInspections(t.Context(), r)
		wantRefused(t, err, codes.InvalidArgument, field)
	}
	_, err = client.ListInspections(t.Context(), &pb.ListInspectionsRequest{PageSize: -1})
	wantRefused(t, err, codes.InvalidArgument, "page_size")
}

// A page of large records ends early and stays below what a client takes by default.
func TestLargePagesAreCut(t *testing.T) {
	f := newFloor(t, nil)
	for range 60 {
		f.put("N1", 100_000)
	}
	client := pb.NewInspectionServiceClient(f.dial())
	r := &pb.ListInspectionsRequest{PageSize: 1000}
	n := 0
	for {
		page, err := client.ListInspections(t.Context(), r)
		if err != nil {
			t.Fatal(err)
		}
		n += len(page.GetInspections())
		if r.PageToken = page.GetNextPageToken(); r.PageToken == "" {
			break
		}
	}
	if n != 60 {
		t.Errorf("%d inspections in all pages, want 60", n)
	}
}

func TestCountInspections(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	client := pb.NewInspectionServiceClient(conn)
	at := time.Date(2026, 11, 30, 9, 0, 0, 0, time.UTC)
	for i, c := range []struct {
		station, lot string
		purpose      inspection.Purpose
		minute       int
	}{
		{"N1", "L2601", inspection.Production, 0}, {"N1", "FAIL", inspection.Production, 14}, {"N2", "L2601", inspection.Production, 15},
		{"N2", "RETEST", inspection.Production, 29}, {"N2", "L2601", inspection.Reference, 10}, {"N1", "L2601", inspection.Production, 45},
	} {
		u := newUnit(c.station, fmt.Sprintf("TM%07d", i))
		u.begin.Unit.Lot, u.begin.Purpose, u.begin.MeasuredAt = inspection.Lot(c.lot), c.purpose, at.Add(time.Duration(c.minute)*time.Minute)
		mustRecord(t, conn, u)
	}
	const (
		station  = pb.CountDimension_COUNT_DIMENSION_STATION
		partType = pb.CountDimension_COUNT_DIMENSION_PART_TYPE
		lot      = pb.CountDimension_COUNT_DIMENSION_LOT
		verdict  = pb.CountDimension_COUNT_DIMENSION_VERDICT
	)
	for _, c := range []struct {
		name string
		r    *pb.CountInspectionsRequest
		want string
	}{
		{"all of production", &pb.CountInspectionsRequest{}, "///0=5"},
		{"by station", &pb.CountInspectionsRequest{GroupBy: []pb.CountDimension{station}}, "N1///0=3 N2///0=2"},
		{"by verdict", &pb.CountInspectionsRequest{GroupBy: []pb.CountDimension{verdict, verdict}}, "///1=3 ///2=1 ///3=1"},
		{"by all", &pb.CountInspectionsRequest{GroupBy: []pb.CountDimension{station, partType, lot, verdict}},
			"N1/TM-25M000-F10/FAIL/2=1 N1/TM-25M000-F10/L2601/1=2 N2/TM-25M000-F10/L2601/1=1 N2/TM-25M000-F10/RETEST/3=1"},
		{"of references", &pb.CountInspectionsRequest{Purpose: pb.Purpose_PURPOSE_REFERENCE}, "///0=1"},
		{"of a lot", &pb.CountInspectionsRequest{Lot: "L2601", GroupBy: []pb.CountDimension{station}}, "N1///0=2 N2///0=1"},
		{"of nothing", &pb.CountInspectionsRequest{Station: "S4"}, "///0=0"},
		{"of nothing, by station", &pb.CountInspectionsRequest{Station: "S4", GroupBy: []pb.CountDimension{station}}, ""},
		{"rounded outwards", &pb.CountInspectionsRequest{MeasuredFrom: stamp(at.Add(14 * time.Minute)), MeasuredUntil: stamp(at.Add(16 * time.Minute))}, "///0=4"},
		{"on the borders", &pb.CountInspectionsRequest{MeasuredFrom: stamp(at.Add(15 * time.Minute)), MeasuredUntil: stamp(at.Add(45 * time.Minute))}, "///0=2"},
	} {
		got, err := client.CountInspections(t.Context(), c.r)
		if err != nil {
			t.Fatal(c.name, err)
		}
		var parts []string
		for _, n := range got.GetCounts() {
			parts = append(parts, fmt.Sprintf("%s/%s/%s/%d=%d", n.GetStation(), n.GetPartType(), n.GetLot(), n.GetVerdict(), n.GetInspections()))
		}
		if s := strings.Join(parts, " "); s != c.want {
			t.Errorf("%s: %s, want %s", c.name, s, c.want)
		}
		if c.name == "rounded outwards" && (!got.GetCountedFrom().AsTime().Equal(at) || !got.GetCountedUntil().AsTime().Equal(at.Add(30*time.Minute))) {
			t.Errorf("counted from %v until %v", got.GetCountedFrom().AsTime(), got.GetCountedUntil().AsTime())
		}
		if c.name == "by station" && (got.GetCountedFrom() != nil || got.GetCountedUntil() != nil) {
			t.Errorf("open ends were told as %v, %v", got.GetCountedFrom(), got.GetCountedUntil())
		}
	}
	for _, d := range []pb.CountDimension{0, 9} {
		_, err := client.CountInspections(t.Context(), &pb.CountInspectionsRequest{GroupBy: []pb.CountDimension{station, d}})
		wantRefused(t, err, codes.InvalidArgument, "group_by[1]")
	}
}

// Sweeps come back bit for bit, whatever their form.
func TestReadSweepsBitForBit(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	u := newUnit("N1", "TM0000001")
	free := newSweep(sweep.Unwanted, 10_001, 3)
	free.Grid = nil
	free.FrequencyHz[17] = math.Nextafter(free.FrequencyHz[17], 0)
	magnitudes := newSweep(sweep.ShuntCapacitance, 33, 5)
	magnitudes.Quantity, magnitudes.Im = sweep.S21Magnitude, nil
	power := -2.2
	falling := newSweep(sweep.Main, 101, 1)
	falling.Grid.StartHz, falling.Grid.StopHz = falling.Grid.StopHz, falling.Grid.StartHz
	falling.SourcePowerDBm, falling.Timing = &power, sweep.Timing{Dwell: 2 * time.Millisecond, Averaging: time.Millisecond, Phase: sweep.PhaseContinuous}
	for i := range falling.FrequencyHz {
		falling.FrequencyHz[i] = falling.Grid.At(i)
	}
	u.sweeps = append(u.sweeps, free, magnitudes, falling)
	mustRecord(t, conn, u)
	read := func(r *pb.ReadSweepsRequest) ([]sweep.Sweep, []uint32, error) {
		stream, err := pb.NewInspectionServiceClient(conn).ReadSweeps(t.Context(), r)
		if err != nil {
			return nil, nil, err
		}
		var all []sweep.Sweep
		var indexes []uint32
		var a wire.Assembly
		for {
			m, err := stream.Recv()
			if errors.Is(err, io.EOF) {
				return all, indexes, nil
			}
			if err != nil {
				return nil, nil, err
			}
			if h := m.GetHeader(); h != nil {
				head, err := wire.HeaderFromProto(h)
				if err != nil {
					return nil, nil, err
				}
				a.Start(head)
				indexes = append(indexes, h.GetIndex())
				continue
			}
			w, done, err := a.Add(m.GetSamples())
			if err != nil {
				return nil, nil, err
			}
			if done {
				all = append(all, w)
			}
		}
	}
	id := u.begin.ID.String()
	got, _, err := read(&pb.ReadSweepsRequest{InspectionId: id})
	if err != nil {
		t.Fatal(err)
	}
	if inspection.ContentHash(&u.begin, got) != inspection.ContentHash(&u.begin, u.sweeps) {
		t.Error("the sweeps came back changed")
	}
	some, indexes, err := read(&pb.ReadSweepsRequest{InspectionId: id, SweepIndex: []uint32{3, 1, 1}})
	if err != nil || fmt.Sprint(indexes) != "[1 3]" || len(some) != 2 || some[0].Points() != 10_001 {
		t.Errorf("sweeps 3 and 1: %v, %v", indexes, err)
	}
	_, _, err = read(&pb.ReadSweepsRequest{InspectionId: id, SweepIndex: []uint32{0, 4}})
	wantRefused(t, err, codes.InvalidArgument, "sweep_index[1]")
	_, _, err = read(&pb.ReadSweepsRequest{InspectionId: newID().String()})
	wantRefused(t, err, codes.NotFound, "inspection_id")
	if held := f.server.budget.held.Load(); held != 0 {
		t.Errorf("%d points are still held", held)
	}
}

func TestPartTypes(t *testing.T) {
	f := newFloor(t, nil)
	client := pb.NewPartTypeServiceClient(f.dial())
	file := limitsFile(t, "TM-12M288-F16")
	publish := func(file []byte, only bool) (*pb.PublishPartTypeResponse, error) {
		return client.PublishPartType(t.Context(), &pb.PublishPartTypeRequest{LimitsFile: file, ValidateOnly: only})
	}
	got, err := publish(file, true)
	if err != nil || got.GetPartType().GetPublishedAt() != nil || got.GetPartType().GetPublishedBy() != "" || got.GetPartType().GetName() != "TM-12M288-F16" {
		t.Errorf("validated only: %v, %v", got, err)
	}
	_, err = client.GetPartType(t.Context(), &pb.GetPartTypeRequest{Name: "TM-12M288-F16"})
	wantRefused(t, err, codes.NotFound, "name")
	logged := f.log.since()
	for _, already := range []bool{false, true} {
		got, err = publish(file, false)
		if err != nil || got.GetAlreadyPublished() != already || got.GetPartType().GetPublishedBy() != Loopback || got.GetPartType().GetPublishedAt() == nil {
			t.Errorf("published: %v, %v; want already %v", got, err, already)
		}
	}
	if lines(logged(), "msg=part_type_published caller=loopback part_type=TM-12M288-F16 version=1") != 2 {
		t.Errorf("the log does not say who published what:\n%s", logged())
	}
	_, err = publish(append(file, "\n# changed\n"...), false)
	wantRefused(t, err, codes.AlreadyExists, "part_type")
	_, err = publish(make([]byte, MaxLimitsFile+1), false)
	if r := wantRefused(t, err, codes.InvalidArgument, "limits_file"); !strings.Contains(r.text, "131072") || !strings.Contains(r.text, "131073") {
		t.Errorf("want limit and size, got %s", r.text)
	}
	// Every fault at once, each with its line; a file full of faults stays within what a header may hold.
	_, err = publish([]byte("part_type: TM-1\nversion: 0\novertone: -1\nsurprise: yes\n"), true)
	r := wantRefused(t, err, codes.InvalidArgument, "surprise")
	for _, want := range []string{"version", "overtone", "line 4"} {
		if !strings.Contains(r.text, want) {
			t.Errorf("want %q in the faults, got\n%s", want, r.text)
		}
	}
	var many strings.Builder
	for i := range 300 {
		fmt.Fprintf(&many, "surprise_%d: %s\n", i, strings.Repeat("y", 30))
	}
	_, err = publish([]byte(many.String()), true)
	r = wantRefused(t, err, codes.InvalidArgument, "surprise_0")
	if n := len(r.text); n > 7000 || !strings.Contains(r.text, "more faults") {
		t.Errorf("%d bytes of faults, want a short list that says so", n)
	}
	for v := 2; v < 6; v++ {
		if _, err := publish([]byte(strings.Replace(string(file), "version: 1", fmt.Sprint("version: ", v), 1)), false); err != nil {
			t.Fatal(err)
		}
	}
	one, err := client.GetPartType(t.Context(), &pb.GetPartTypeRequest{Name: "TM-12M288-F16", Version: 1})
	if err != nil || string(one.GetPartType().GetLimitsFile()) != string(file) {
		t.Errorf("version 1: %v", err)
	}
	if one, err = client.GetPartType(t.Context(), &pb.GetPartTypeRequest{Name: "TM-12M288-F16"}); err != nil || one.GetPartType().GetVersion() != 5 {
		t.Errorf("newest: %v, %v", one.GetPartType().GetVersion(), err)
	}
	for _, c := range []struct{ name, want string }{
		{"", "TM-12M288-F16:5 TM-25M000-F10:1"},
		{"TM-12M288-F16", "TM-12M288-F16:5 TM-12M288-F16:4 TM-12M288-F16:3 TM-12M288-F16:2 TM-12M288-F16:1"},
		{"TM-1", ""},
	} {
		for _, size := range []int32{1, 2, 5, 0} {
			m := &pb.ListPartTypesRequest{Name: c.name, PageSize: size}
			var found []string
			for {
				page, err := client.ListPartTypes(t.Context(), m)
				if err != nil {
					t.Fatal(err)
				}
				for _, p := range page.GetPartTypes() {
					if len(p.GetLimitsFile()) > 0 || len(p.GetSha256()) != 32 {
						t.Errorf("listed with its file, or without its hash: %v", p)
					}
					found = append(found, fmt.Sprintf("%s:%d", p.GetName(), p.GetVersion()))
				}
				if m.PageToken = page.GetNextPageToken(); m.PageToken == "" {
					break
				}
			}
			if s := strings.Join(found, " "); s != c.want {
				t.Errorf("part types %q in pages of %d: %s, want %s", c.name, size, s, c.want)
			}
		}
	}
}

func TestStoreStatus(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
	client := pb.NewStoreServiceClient(conn)
	got, err := client.GetStoreStatus(t.Context(), &pb.GetStoreStatusRequest{})
	if err != nil || !got.GetRecording() || got.GetLastSequence() != 1 || len(got.GetVolumes()) != 1 || got.GetVolumes()[0].GetMeasuredFrom() == nil {
		t.Errorf("status %v, %v", got, err)
	}
	f.store.Break(errors.New("no room on the disk"))
	if got, err = client.GetStoreStatus(t.Context(), &pb.GetStoreStatusRequest{}); err != nil || got.GetRecording() || got.GetFault() != "no room on the disk" {
		t.Errorf("status %v, %v", got, err)
	}
}

func TestJudgeRemembersNothing(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	c := newCalibration("N1-A-2026-11-30", "N1-A")
	material := func(calibrated bool) []*pb.JudgeRequest {
		u := newUnit("N1", "TM0000001")
		b := wire.BeginToProto(&u.begin)
		b.InspectionId, b.PartType = "", "TM-12M288-F16"
		in := &pb.JudgeContext{Begin: b, LimitsFile: limitsFile(t, "TM-12M288-F16")}
		m := []*pb.JudgeRequest{{Message: &pb.JudgeRequest_Context{Context: in}}}
		if calibrated {
			b.CalibrationId, in.Calibration = c.ID, wire.CalibrationToProto(c, false)
			for _, s := range wire.StandardSamplesToProto(c) {
				m = append(m, &pb.JudgeRequest{Message: &pb.JudgeRequest_StandardSamples{StandardSamples: s}})
			}
		}
		for i := range u.sweeps {
			m = append(m, &pb.JudgeRequest{Message: &pb.JudgeRequest_Header{Header: wire.HeaderToProto(i, inspection.HeaderOf(&u.sweeps[i]))}})
			for _, s := range wire.SamplesToProto(&u.sweeps[i]) {
				m = append(m, &pb.JudgeRequest{Message: &pb.JudgeRequest_Samples{Samples: s}})
			}
		}
		return m
	}
	send := func(m []*pb.JudgeRequest) (*pb.JudgeResponse, error) { return judgeAll(t, conn, m) }
	for _, calibrated := range []bool{false, true} {
		got, err := send(material(calibrated))
		if err != nil || got.GetJudgement().GetVerdict() != pb.Verdict_VERDICT_PASS {
			t.Errorf("calibrated %v: %v, %v", calibrated, got, err)
		}
	}
	context := func(change func(*pb.JudgeContext)) func([]*pb.JudgeRequest) []*pb.JudgeRequest {
		return func(m []*pb.JudgeRequest) []*pb.JudgeRequest { change(m[0].GetContext()); return m }
	}
	for _, r := range []struct {
		name   string
		change func([]*pb.JudgeRequest) []*pb.JudgeRequest
		field  string
	}{
		{"nothing", func([]*pb.JudgeRequest) []*pb.JudgeRequest { return nil }, "context"},
		{"no context", func(m []*pb.JudgeRequest) []*pb.JudgeRequest { return m[1:] }, "context"},
		{"context twice", func(m []*pb.JudgeRequest) []*pb.JudgeRequest { return append(m[:1:1], m...) }, "context"},
		{"a standard too few", func(m []*pb.JudgeRequest) []*pb.JudgeRequest { return append(m[:3:3], m[4:]...) }, "samples"},
		{"standards only", func(m []*pb.JudgeRequest) []*pb.JudgeRequest { return m[:3] }, "samples"},
		{"standards after sweeps", func(m []*pb.JudgeRequest) []*pb.JudgeRequest { return append(m, m[1]) }, "standard_samples"},
		{"half a sweep", func(m []*pb.JudgeRequest) []*pb.JudgeRequest { return m[:5] }, "samples"},
		{"no begin", context(func(c *pb.JudgeContext) { c.Begin = nil }), "context.begin.inspection"},
		{"another part type", context(func(c *pb.JudgeContext) { c.Begin.PartType = partType }), "context.begin.part_type"},
		{"another version", context(func(c *pb.JudgeContext) { c.Begin.PartTypeVersion = 2 }), "context.begin.part_type"},
		{"another calibration", context(func(c *pb.JudgeContext) { c.Begin.CalibrationId = "N1-B" }), "context.begin.calibration_id"},
		{"no limits", context(func(c *pb.JudgeContext) { c.LimitsFile = nil }), ""},
		{"an empty message", func(m []*pb.JudgeRequest) []*pb.JudgeRequest { return append(m, &pb.JudgeRequest{}) }, "message"},
	} {
		t.Run(r.name, func(t *testing.T) {
			_, err := send(r.change(material(true)))
			wantRefused(t, err, codes.InvalidArgument, r.field)
		})
	}
	if f.store.Last() != 0 || f.heard.judged != 0 || f.server.budget.held.Load() != 0 {
		t.Error("something was remembered")
	}
}

func judgeAll(t *testing.T, conn *grpc.ClientConn, m []*pb.JudgeRequest) (*pb.JudgeResponse, error) {
	t.Helper()
	stream, err := pb.NewJudgementServiceClient(conn).Judge(t.Context())
	if err != nil {
		return nil, err
	}
	for _, one := range m {
		if stream.Send(one) != nil {
			break // the status is what CloseAndRecv returns
		}
	}
	return stream.CloseAndRecv()
}
