package rpc

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"net"
	"runtime"
	"strings"
	"testing"
	"time"

	"golang.org/x/net/http2"
	"golang.org/x/net/http2/hpack"
	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/metadata"
	"google.golang.org/grpc/status"
	"google.golang.org/protobuf/proto"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
	"example.com/admit/service/wire"
)

// Sweeps of every size about their limits (promise P11): too few or too many points are named, what fits is recorded, and the next
// inspection on the connection works.
func TestSweepSizes(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	for _, c := range []struct {
		points int
		code   codes.Code
		field  string
		says   []string
	}{
		{0, codes.InvalidArgument, "header.points", []string{"200001", "0"}},
		{1, codes.InvalidArgument, "sweeps[0]", []string{"9 to 200001", "1"}},
		{2, codes.InvalidArgument, "sweeps[0]", []string{"9 to 200001", "2"}},
		{sweep.MinPoints - 1, codes.InvalidArgument, "sweeps[0]", []string{"9 to 200001", "8"}},
		{sweep.MinPoints, codes.OK, "", nil},
		{sweep.MaxPoints - 1, codes.OK, "", nil},
		{sweep.MaxPoints, codes.OK, "", nil},
		{sweep.MaxPoints + 1, codes.InvalidArgument, "header.points", []string{"200001", "200002"}},
	} {
		u := newUnit("N1", "TM0000001")
		u.sweeps = []sweep.Sweep{newSweep(sweep.Main, max(c.points, 1), 1)}
		m := u.messages()
		if c.points == 0 {
			m[1].GetHeader().Points, m[1].GetHeader().Grid.Points = 0, 0
		}
		_, err := inspectAll(t.Context(), conn, m)
		if c.code == codes.OK {
			if err != nil {
				t.Errorf("%d points: %v", c.points, err)
			}
			continue
		}
		r := wantRefused(t, err, c.code, c.field)
		for _, w := range c.says {
			if !strings.Contains(r.text, w) {
				t.Errorf("%d points: want %q in %q", c.points, w, r.text)
			}
		}
		mustRecord(t, conn, newUnit("N1", "TM0000002"))
	}
}

func TestInspectionSizes(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	u := newUnit("N1", "TM0000001")
	u.sweeps = nil
	for range inspection.MaxSweeps {
		u.sweeps = append(u.sweeps, newSweep(sweep.Main, 9, 1))
	}
	mustRecord(t, conn, u)
	u.begin.ID = newID()
	u.sweeps = append(u.sweeps, newSweep(sweep.Main, 9, 1))
	_, err := inspectAll(t.Context(), conn, u.messages())
	if r := wantRefused(t, err, codes.InvalidArgument, "header"); !strings.Contains(r.text, "64") {
		t.Errorf("want the limit of sweeps, got %s", r.text)
	}
	// A million points in all, told from the headers before the last sample came.
	u = newUnit("N1", "TM0000002")
	u.sweeps = nil
	for range 6 {
		u.sweeps = append(u.sweeps, newSweep(sweep.Main, 170_000, 1))
	}
	_, err = inspectAll(t.Context(), conn, u.messages())
	if r := wantRefused(t, err, codes.InvalidArgument, "header.points"); !strings.Contains(r.text, "1000000") || !strings.Contains(r.text, "1020000") {
		t.Errorf("want limit and sum, got %s", r.text)
	}
	// Ten thousand chunks of one point.
	u = newUnit("N1", "TM0000003")
	u.sweeps = []sweep.Sweep{newSweep(sweep.Main, 10_000, 1)}
	m := u.messages()
	cut := append([]*pb.InspectRequest{}, m[:2]...)
	w := &u.sweeps[0]
	for i := range w.Points() {
		cut = append(cut, &pb.InspectRequest{Message: &pb.InspectRequest_Samples{Samples: &pb.SweepSamples{Re: w.Re[i : i+1], Im: w.Im[i : i+1]}}})
	}
	if _, err := inspectAll(t.Context(), conn, append(cut, m[len(m)-1])); err != nil {
		t.Errorf("10 000 chunks: %v", err)
	}
	if held := f.server.budget.held.Load(); held != 0 {
		t.Errorf("%d points are still held", held)
	}
}

func TestNamesAtTheirLimit(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	for _, c := range []struct {
		field string
		set   func(*pb.Begin, string)
	}{
		{"begin.unit.serial", func(b *pb.Begin, s string) { b.Unit.Serial = s }},
		{"begin.unit.lot", func(b *pb.Begin, s string) { b.Unit.Lot = s }},
		{"begin.unit.carrier", func(b *pb.Begin, s string) { b.Unit.Carrier = s }},
		{"begin.station", func(b *pb.Begin, s string) { b.Station = s }},
		{"begin.contact_head", func(b *pb.Begin, s string) { b.ContactHead = s }},
		{"begin.operator", func(b *pb.Begin, s string) { b.Operator = s }},
	} {
		for _, n := range []int{inspection.MaxText, inspection.MaxText + 1} {
			m := newUnit("N1", "TM0000001").messages()
			c.set(m[0].GetBegin(), strings.Repeat("x", n))
			m[3] = &pb.InspectRequest{Message: &pb.InspectRequest_End{End: &pb.End{}}}
			_, err := inspectAll(t.Context(), conn, m)
			if n == inspection.MaxText {
				if err != nil {
					t.Errorf("%s of %d bytes: %v", c.field, n, err)
				}
				continue
			}
			if r := wantRefused(t, err, codes.InvalidArgument, c.field); !strings.Contains(r.text, "128") || !strings.Contains(r.text, "129") {
				t.Errorf("%s: want limit and size, got %s", c.field, r.text)
			}
		}
	}
}

// ofSize returns a message of samples of exactly n bytes.
func ofSize(t *testing.T, n int) *pb.InspectRequest {
	t.Helper()
	b := &pb.Begin{InspectionId: "x"}
	m := &pb.InspectRequest{Message: &pb.InspectRequest_Begin{Begin: b}}
	b.Operator = strings.Repeat("o", n-100)
	b.Operator += strings.Repeat("o", n-proto.Size(m))
	if got := proto.Size(m); got != n {
		t.Fatalf("a message of %d bytes, want %d", got, n)
	}
	return m
}

// Messages at their limit, one byte above it, and far above: the first is taken, the second named by its number, the third refused by
// the transport; only their stream ends.
func TestMessageSizes(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	for _, n := range []int{MaxMessage - 1, MaxMessage} {
		_, err := inspectAll(t.Context(), conn, []*pb.InspectRequest{ofSize(t, n)})
		wantRefused(t, err, codes.InvalidArgument, "begin.inspection") // taken, and read
	}
	for _, n := range []int{MaxMessage + 1, hardMessage} {
		_, err := inspectAll(t.Context(), conn, []*pb.InspectRequest{ofSize(t, n)})
		if r := wantRefused(t, err, codes.InvalidArgument, "message"); !strings.Contains(r.text, "262144") || !strings.Contains(r.text, fmt.Sprint(n)) {
			t.Errorf("want limit and size, got %s", r.text)
		}
	}
	_, err := inspectAll(t.Context(), conn, []*pb.InspectRequest{ofSize(t, hardMessage+1)})
	if r := wantRefused(t, err, codes.ResourceExhausted, ""); !strings.Contains(r.text, fmt.Sprint(hardMessage)) || r.reason != "" {
		t.Errorf("want the transport's refusal, got %v", err)
	}
	_, err = pb.NewPartTypeServiceClient(conn).PublishPartType(t.Context(), &pb.PublishPartTypeRequest{LimitsFile: make([]byte, MaxMessage)})
	wantRefused(t, err, codes.InvalidArgument, "message")
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
}

func TestLargeMetadata(t *testing.T) {
	f := newFloor(t, nil)
	conn := f.dial()
	for _, n := range []int{MaxHeaderList, 4 * MaxHeaderList, 16 << 20} {
		if err := callMetadata(metadata.AppendToOutgoingContext(t.Context(), "large", strings.Repeat("x", n)), conn); status.Code(err) == codes.OK {
			t.Errorf("metadata of %d bytes was taken", n)
		}
	}
	if err := callMetadata(metadata.AppendToOutgoingContext(t.Context(), "large", strings.Repeat("x", MaxHeaderList/2)), conn); err != nil {
		t.Errorf("metadata of %d bytes: %v", MaxHeaderList/2, err)
	}
	// A caller who does not keep to what he was told: his connection ends, memory stays, the others go on.
	var before, after runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&before)
	floodMetadata(t, f.address, 16<<20)
	floodMetadata(t, f.address, 1<<20)
	runtime.GC()
	runtime.ReadMemStats(&after)
	if grown := int64(after.HeapAlloc) - int64(before.HeapAlloc); grown > 8<<20 {
		t.Errorf("memory grew by %d MiB", grown>>20)
	}
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
}

func callMetadata(ctx context.Context, conn *grpc.ClientConn) error {
	_, err := pb.NewStoreServiceClient(conn).GetStoreStatus(ctx, &pb.GetStoreStatusRequest{})
	return err
}

// floodMetadata opens a stream whose header list has n bytes, frame after frame, as long as the server listens.
func floodMetadata(t *testing.T, address string, n int) {
	t.Helper()
	conn, err := net.Dial("tcp", address)
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close()
	if _, err := io.WriteString(conn, http2.ClientPreface); err != nil {
		t.Fatal(err)
	}
	read := make(chan struct{})
	go func() { defer close(read); _, _ = io.Copy(io.Discard, conn) }() // ends with the connection
	framer := http2.NewFramer(conn, nil)
	if err := framer.WriteSettings(); err != nil {
		t.Fatal(err)
	}
	var block bytes.Buffer
	e := hpack.NewEncoder(&block)
	for _, h := range [][2]string{{":method", "POST"}, {":scheme", "http"}, {":path", pb.StoreService_GetStoreStatus_FullMethodName}, {"content-type", "application/grpc"}} {
		if err := e.WriteField(hpack.HeaderField{Name: h[0], Value: h[1]}); err != nil {
			t.Fatal(err)
		}
	}
	err = framer.WriteHeaders(http2.HeadersFrameParam{StreamID: 1, BlockFragment: block.Bytes()})
	sent := 0
	for sent < n && err == nil {
		block.Reset()
		if err := e.WriteField(hpack.HeaderField{Name: fmt.Sprint("large-", sent), Value: strings.Repeat("\x7f", 8000)}); err != nil {
			t.Fatal(err)
		}
		conn.SetWriteDeadline(time.Now().Add(5 * time.Second))
		err = framer.WriteContinuation(1, false, block.Bytes()[:min(block.Len(), 16000)])
		sent += block.Len()
	}
	// What was written may still lie in a buffer; that the server has had enough shows when it closes.
	select {
	case <-read:
	case <-time.After(5 * time.Second):
		t.Errorf("the server listens on after %d bytes of metadata (%v)", sent, err)
	}
	conn.Close()
	<-read
}

func TestTooManyStreams(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.MaxStreams = 3 })
	conn := f.dial()
	client := pb.NewStationServiceClient(conn)
	ctx, cancel := context.WithCancel(t.Context())
	for range 3 {
		if _, err := client.Inspect(ctx); err != nil {
			t.Fatal(err)
		}
	}
	eventually(t, "three streams are open", func() bool { return f.server.Streams() == 3 })
	_, err := inspectAll(t.Context(), conn, newUnit("N1", "TM0000001").messages())
	if r := wantRefused(t, err, codes.ResourceExhausted, "streams"); r.retry == 0 || !strings.Contains(r.text, "3") {
		t.Errorf("want limit and delay, got %v", err)
	}
	cancel()
	eventually(t, "they are gone", func() bool { return f.server.Streams() == 0 })
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
}

// What all inspections under way may hold is bounded; who does not fit comes again later.
func TestPointsInMemoryAreBounded(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.MaxPoints = 5000 })
	conn := f.dial()
	u := newUnit("N1", "TM0000001")
	u.sweeps = []sweep.Sweep{newSweep(sweep.Main, 8000, 1)}
	m := u.messages() // the first chunk has 4096 points
	open, err := pb.NewStationServiceClient(conn).Inspect(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for _, one := range m[:3] {
		if err := open.Send(one); err != nil {
			t.Fatal(err)
		}
	}
	eventually(t, "the first chunk is held", func() bool { return f.server.budget.held.Load() == wire.ChunkPoints })
	other := newUnit("N2", "TM0000002")
	other.sweeps = []sweep.Sweep{newSweep(sweep.Main, 1000, 1)}
	_, err = inspectAll(t.Context(), conn, other.messages())
	if r := wantRefused(t, err, codes.ResourceExhausted, "points"); r.retry == 0 || !strings.Contains(r.text, "5000") {
		t.Errorf("want limit and delay, got %v", err)
	}
	if err := open.CloseSend(); err != nil {
		t.Fatal(err)
	}
	eventually(t, "the points are given back", func() bool { return f.server.budget.held.Load() == 0 })
	mustRecord(t, conn, other)
}

// The client's time between pings and what the server allows belong together.
func TestKeepaliveOfBothEndsFits(t *testing.T) {
	c := ClientKeepalive()
	if c.Time <= KeepaliveMinTime {
		t.Errorf("a client pings every %v, the server allows every %v", c.Time, KeepaliveMinTime)
	}
	if d := c.Time + c.Timeout; d > 15*time.Second {
		t.Errorf("a client notices a dead server after %v, want 15 s", d)
	}
	if d := KeepaliveTime + KeepaliveTimeout; d > 15*time.Second {
		t.Errorf("the server notices a dead client after %v, want 15 s", d)
	}
	if !c.PermitWithoutStream {
		t.Error("a client without a stream does not notice a dead server")
	}
}
