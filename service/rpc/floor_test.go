package rpc

import (
	"bytes"
	"context"
	"crypto/rand"
	"errors"
	"io"
	"log/slog"
	"math"
	"net"
	"os"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"go.uber.org/goleak"
	"google.golang.org/genproto/googleapis/rpc/errdetails"
	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/credentials/insecure"
	"google.golang.org/grpc/status"
	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/cmd/prove/peer"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
	"example.com/admit/service/wire"
	"example.com/admit/storage/memory"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// judgeFunc is a Judger by one function.
type judgeFunc func(context.Context, *inspection.Case) (verdict.Judgement, error)

func (f judgeFunc) Judge(ctx context.Context, c *inspection.Case) (verdict.Judgement, error) {
	return f(ctx, c)
}

// judgeByLot judges as the lot is called, and puts the first sample into a finding, so that a mix-up of inspections shows.
func judgeByLot(_ context.Context, c *inspection.Case) (verdict.Judgement, error) {
	j := verdict.Judgement{Verdict: verdict.Pass}
	limit := 40.0
	f := verdict.Finding{
		Quantity: parttype.MotionalResistance, Where: verdict.Nowhere, HasValue: true, Unit: "ohm", Bounds: parttype.Bounds{Max: &limit},
		Measured: verdict.Value{StandardUncertainty: 0.1}, Outcome: verdict.Conforms, Text: "Motional resistance as measured.",
	}
	if len(c.Sweeps) > 0 {
		f.Measured.Value = c.Sweeps[0].Re[0]
	}
	switch c.Begin.Unit.Lot {
	case "FAIL":
		j.Verdict, f.Outcome, f.Text = verdict.Fail, verdict.Violates, "Motional resistance above its limit."
	case "RETEST":
		j.Verdict = verdict.Retest
		j.RetestCauses = []verdict.RetestCause{verdict.NewCause(verdict.TooNoisy, "The noise is too high.")}
	case "PANIC":
		panic("a defect in the judge")
	}
	j.Findings = []verdict.Finding{f}
	return j, nil
}

type wallClock struct{}

func (wallClock) Now() time.Time { return time.Now() }

// listener hears what the service tells.
type listener struct {
	mu       sync.Mutex
	judged   int
	recorded []*inspection.Record
	rejected []inspection.Kind
}

func (l *listener) Judged(*inspection.Record, time.Duration) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.judged++
}

func (l *listener) Recorded(r *inspection.Record, _ time.Duration) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.recorded = append(l.recorded, r)
}

func (l *listener) Rejected(_ inspection.StationID, k inspection.Kind) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.rejected = append(l.rejected, k)
}

// logBook keeps log lines.
type logBook struct {
	mu    sync.Mutex
	lines bytes.Buffer
}

func (b *logBook) Write(p []byte) (int, error) {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.lines.Write(p)
}

func (b *logBook) size() int {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.lines.Cap()
}

// since returns a function that returns what was logged from now on.
func (b *logBook) since() func() string {
	b.mu.Lock()
	defer b.mu.Unlock()
	from := b.lines.Len()
	return func() string {
		b.mu.Lock()
		defer b.mu.Unlock()
		return b.lines.String()[from:]
	}
}

// testFloor is a server on a loopback address with an in-memory store.
type testFloor struct {
	t       *testing.T
	server  *Server
	store   *memory.Store
	heard   *listener
	log     *logBook
	address string
	stop    func() error // what Serve returned
}

const partType = "TM-25M000-F10"

func limitsFile(t testing.TB, name string) []byte {
	t.Helper()
	b, err := os.ReadFile(peer.Testdata("part_types", name+".yaml"))
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// newServer returns a server that is not served yet, with one part type published.
func newServer(t *testing.T, change func(*Options)) *testFloor {
	t.Helper()
	f := &testFloor{t: t, store: memory.New(wallClock{}), heard: &listener{}, log: &logBook{}}
	p, err := parttype.Parse("part-type.yaml", limitsFile(t, partType))
	if err != nil {
		t.Fatal(err)
	}
	if _, _, err := f.store.PublishPartType(t.Context(), p, "test"); err != nil {
		t.Fatal(err)
	}
	o := Options{
		Desk: &inspection.Desk{
			Judge: judgeFunc(judgeByLot), Recorder: f.store, Catalogue: f.store, Clock: wallClock{}, Observer: f.heard, Software: "test-revision",
		},
		Archive: f.store, Publisher: f.store, Grace: 500 * time.Millisecond,
		Log: slog.New(slog.NewTextHandler(f.log, &slog.HandlerOptions{Level: slog.LevelDebug})),
	}
	if change != nil {
		change(&o)
	}
	if f.server, err = New(o); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(f.server.Close)
	return f
}

// newFloor returns a server that answers on a plain loopback address.
func newFloor(t *testing.T, change func(*Options)) *testFloor {
	t.Helper()
	f := newServer(t, change)
	f.serve(Listener{Listener: f.listen(), Plain: true})
	return f
}

func (f *testFloor) listen() net.Listener {
	f.t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		f.t.Fatal(err)
	}
	return l
}

func (f *testFloor) serve(l Listener) {
	f.address = l.Addr().String()
	ctx, cancel := context.WithCancel(context.Background())
	result := make(chan error, 1)
	go func() { result <- f.server.Serve(ctx, l) }()
	f.stop = sync.OnceValue(func() error { cancel(); return <-result })
	f.t.Cleanup(func() {
		if err := f.stop(); err != nil {
			f.t.Errorf("Serve returned %v, want nil", err)
		}
	})
}

func (f *testFloor) dial(options ...grpc.DialOption) *grpc.ClientConn {
	f.t.Helper()
	if len(options) == 0 {
		options = []grpc.DialOption{grpc.WithTransportCredentials(insecure.NewCredentials())}
	}
	conn, err := grpc.NewClient("passthrough:///"+f.address, append(options, grpc.WithNoProxy())...)
	if err != nil {
		f.t.Fatal(err)
	}
	f.t.Cleanup(func() { conn.Close() })
	return conn
}

// newID returns a fresh UUID of version 7.
func newID() inspection.ID {
	var id inspection.ID
	rand.Read(id[:])
	id[6], id[8] = id[6]&0x0f|0x70, id[8]&0x3f|0x80
	return id
}

// unit is one inspection as a fixture would send it.
type unit struct {
	begin  inspection.Begin
	sweeps []sweep.Sweep
}

func newUnit(station, serial string) *unit {
	return &unit{
		begin: inspection.Begin{
			ID: newID(), Purpose: inspection.Production, Unit: inspection.UnitID{Serial: inspection.Serial(serial), Lot: "L2601"},
			Station: inspection.StationID(station), ContactHead: inspection.ContactHead(station + "-A"),
			PartType: inspection.PartTypeRef{Name: partType}, MeasuredAt: time.Date(2026, 11, 30, 9, 12, 44, 0, time.UTC),
		},
		sweeps: []sweep.Sweep{newSweep(sweep.Main, 401, 25)},
	}
}

// newSweep returns a sweep on a grid about 25 MHz whose first real part is first.
func newSweep(role sweep.Role, points int, first float64) sweep.Sweep {
	g := sweep.Grid{StartHz: 24.99e6, StopHz: 25.02e6, Points: points}
	w := sweep.Sweep{Role: role, Quantity: sweep.S21, Grid: &g}
	for i := range points {
		w.FrequencyHz = append(w.FrequencyHz, g.At(i))
		w.Re = append(w.Re, first+math.Sin(float64(i)))
		w.Im = append(w.Im, math.Cos(float64(i)))
	}
	return w
}

// messages returns what a fixture sends for the unit.
func (u *unit) messages() []*pb.InspectRequest {
	all := []*pb.InspectRequest{{Message: &pb.InspectRequest_Begin{Begin: wire.BeginToProto(&u.begin)}}}
	for i := range u.sweeps {
		all = append(all, &pb.InspectRequest{Message: &pb.InspectRequest_Header{Header: wire.HeaderToProto(i, inspection.HeaderOf(&u.sweeps[i]))}})
		for _, c := range wire.SamplesToProto(&u.sweeps[i]) {
			all = append(all, &pb.InspectRequest{Message: &pb.InspectRequest_Samples{Samples: c}})
		}
	}
	sum := inspection.ContentHash(&u.begin, u.sweeps)
	return append(all, &pb.InspectRequest{Message: &pb.InspectRequest_End{End: &pb.End{ContentSha256: sum[:]}}})
}

// answers is what came back for one inspection.
type answers struct {
	plan      *pb.SweepPlan
	judgement *pb.Judgement
	recorded  *pb.Recorded
	order     string
}

// inspect sends messages on one stream, closes its side, and reads to the end.
func inspectAll(ctx context.Context, conn *grpc.ClientConn, messages []*pb.InspectRequest) (answers, error) {
	ctx, cancel := context.WithTimeout(ctx, 20*time.Second)
	defer cancel()
	var got answers
	stream, err := pb.NewStationServiceClient(conn).Inspect(ctx)
	if err != nil {
		return got, err
	}
	for _, m := range messages {
		if err := stream.Send(m); err != nil {
			break // the status is what Recv returns
		}
	}
	if err := stream.CloseSend(); err != nil {
		return got, err
	}
	for {
		m, err := stream.Recv()
		if errors.Is(err, io.EOF) {
			return got, nil
		}
		if err != nil {
			return got, err
		}
		switch m := m.GetMessage().(type) {
		case *pb.InspectResponse_Plan:
			got.plan, got.order = m.Plan, got.order+"plan "
		case *pb.InspectResponse_Judgement:
			got.judgement, got.order = m.Judgement, got.order+"judgement "
		case *pb.InspectResponse_Recorded:
			got.recorded, got.order = m.Recorded, got.order+"recorded "
		}
	}
}

// mustRecord has the unit recorded.
func mustRecord(t *testing.T, conn *grpc.ClientConn, u *unit) *pb.Recorded {
	t.Helper()
	got, err := inspectAll(t.Context(), conn, u.messages())
	if err != nil {
		t.Fatal(err)
	}
	return got.recorded
}

// refusal is what a caller was told.
type refusal struct {
	code     codes.Code
	reason   string
	fields   []string
	text     string
	metadata map[string]string
	retry    time.Duration
}

func refusalOf(t testing.TB, err error) refusal {
	t.Helper()
	st, ok := status.FromError(err)
	if !ok {
		t.Fatalf("want a status, got %v", err)
	}
	r := refusal{code: st.Code(), text: st.Message()}
	for _, d := range st.Details() {
		switch d := d.(type) {
		case *errdetails.ErrorInfo:
			if d.GetDomain() != ErrorDomain {
				t.Errorf("domain %q, want %q", d.GetDomain(), ErrorDomain)
			}
			r.reason, r.metadata = d.GetReason(), d.GetMetadata()
		case *errdetails.BadRequest:
			for _, v := range d.GetFieldViolations() {
				r.fields = append(r.fields, v.GetField())
				r.text += "\n" + v.GetField() + ": " + v.GetDescription()
			}
		case *errdetails.RetryInfo:
			r.retry = d.GetRetryDelay().AsDuration()
		}
	}
	return r
}

// wantRefused fails unless err is of the code, and names the field.
func wantRefused(t testing.TB, err error, code codes.Code, field string) refusal {
	t.Helper()
	if err == nil {
		t.Fatalf("want %v, got no error", code)
	}
	r := refusalOf(t, err)
	if r.code != code {
		t.Fatalf("want %v, got %v", code, err)
	}
	if code == codes.InvalidArgument && !slices.Contains(r.fields, field) {
		t.Errorf("want a violation of field %q, got %q in %v", field, r.fields, err)
	}
	if code != codes.InvalidArgument && field != "" && r.metadata["field"] != field {
		t.Errorf("want the field %q in the error's metadata, got %v", field, r.metadata)
	}
	return r
}

func eventually(t testing.TB, what string, is func() bool) {
	t.Helper()
	for end := time.Now().Add(5 * time.Second); time.Now().Before(end); time.Sleep(2 * time.Millisecond) {
		if is() {
			return
		}
	}
	t.Fatalf("after 5 s still not: %s", what)
}

func stamp(t time.Time) *timestamppb.Timestamp { return timestamppb.New(t) }

func lines(text, having string) (n int) {
	for _, l := range strings.Split(text, "\n") {
		if strings.Contains(l, having) {
			n++
		}
	}
	return n
}
