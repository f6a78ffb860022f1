package rpc

import (
	"context"
	"errors"
	"io"
	"net"
	"strings"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	healthpb "google.golang.org/grpc/health/grpc_health_v1"
	"google.golang.org/grpc/status"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
)

func TestPlainIsForLoopbackOnly(t *testing.T) {
	outside := &net.TCPAddr{IP: net.IPv4(192, 0, 2, 7), Port: 7443}
	for _, c := range []struct {
		name string
		l    Listener
		tls  bool
		ok   bool
	}{
		{"plain on loopback", Listener{named4{addr: &net.TCPAddr{IP: net.IPv4(127, 0, 0, 1)}}, true}, false, true},
		{"plain on IPv6 loopback", Listener{named4{addr: &net.TCPAddr{IP: net.IPv6loopback}}, true}, false, true},
		{"plain on an outside address", Listener{named4{addr: outside}, true}, true, false},
		{"plain on every address", Listener{named4{addr: &net.TCPAddr{IP: net.IPv6unspecified}}, true}, true, false},
		{"plain on no TCP address", Listener{named4{addr: &net.UnixAddr{Name: "x"}}, true}, true, false},
		{"TLS on an outside address", Listener{named4{addr: outside}, false}, true, true},
		{"TLS without certificates", Listener{named4{addr: outside}, false}, false, false},
	} {
		if err := c.l.check(c.tls); (err == nil) != c.ok {
			t.Errorf("%s: %v, want allowed %v", c.name, err, c.ok)
		}
	}
	f := newServer(t, nil)
	if err := f.server.Serve(t.Context(), Listener{named4{addr: outside}, true}); err == nil || !strings.Contains(err.Error(), "192.0.2.7") {
		t.Errorf("Serve on an outside address without TLS returned %v", err)
	}
	if err := f.server.Serve(t.Context()); err == nil {
		t.Error("served twice")
	}
}

// named4 is a listener that has nothing but an address.
type named4 struct {
	net.Listener
	addr net.Addr
}

func (n named4) Addr() net.Addr { return n.addr }

// A stop with 32 streams open in every state: quick, clean, everyone told.
func TestStopWithOpenStreams(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.Grace = 300 * time.Millisecond })
	conn := f.dial()
	var streams []grpc.BidiStreamingClient[pb.InspectRequest, pb.InspectResponse]
	for i := range 32 {
		s, err := pb.NewStationServiceClient(conn).Inspect(t.Context())
		if err != nil {
			t.Fatal(err)
		}
		m := newUnit("N1", "TM0000001").messages()
		for _, one := range m[:i%4] { // nothing, Begin, a header, all but End
			if err := s.Send(one); err != nil {
				t.Fatal(err)
			}
		}
		if i%4 > 0 {
			if _, err := s.Recv(); err != nil {
				t.Fatal(err)
			}
		}
		streams = append(streams, s)
	}
	watch, err := pb.NewInspectionServiceClient(conn).WatchInspections(t.Context(), &pb.WatchInspectionsRequest{})
	if err != nil {
		t.Fatal(err)
	}
	stations, err := pb.NewStationServiceClient(conn).WatchStations(t.Context(), &pb.WatchStationsRequest{})
	if err != nil {
		t.Fatal(err)
	}
	health, err := healthpb.NewHealthClient(conn).Watch(t.Context(), &healthpb.HealthCheckRequest{})
	if err != nil {
		t.Fatal(err)
	}
	if m, err := health.Recv(); err != nil || m.GetStatus() != healthpb.HealthCheckResponse_SERVING {
		t.Fatalf("health %v %v", m, err)
	}
	eventually(t, "every stream is open", func() bool { return f.server.Streams() == 35 })
	begun := time.Now()
	done := make(chan error, 1)
	go func() { done <- f.stop() }()

	// Health first, then the end of everything.
	if m, err := health.Recv(); err != nil || m.GetStatus() != healthpb.HealthCheckResponse_NOT_SERVING {
		t.Errorf("health during the stop: %v %v, want not serving", m, err)
	}
	// A unit whose samples are all there is still finished.
	last := streams[31]
	if err := last.Send(&pb.InspectRequest{Message: &pb.InspectRequest_End{End: &pb.End{}}}); err != nil {
		t.Error(err)
	}
	for _, what := range []string{"judgement", "record"} {
		if m, err := last.Recv(); err != nil || (m.GetJudgement() == nil && m.GetRecorded() == nil) {
			t.Errorf("the unit that was complete got %v, %v; want its %s", m, err, what)
		}
	}
	ended := func(err error, what string) {
		if r := refusalOf(t, err); r.code != codes.Unavailable || r.retry == 0 {
			t.Errorf("%s ended with %v, want Unavailable with a delay", what, err)
		}
	}
	for err = nil; err == nil; { // the unit that was finished may be told first
		_, err = watch.Recv()
	}
	ended(err, "the watch of inspections")
	if r := refusalOf(t, err); r.metadata["resume_token"] == "" {
		t.Error("the watch ended without a resume token")
	}
	for err = nil; err == nil; {
		_, err = stations.Recv()
	}
	ended(err, "the watch of stations")
	for i, s := range streams[:31] {
		_, err := s.Recv()
		ended(err, "stream "+string(rune('0'+i%4)))
	}
	if err := <-done; err != nil {
		t.Errorf("Serve returned %v", err)
	}
	if d := time.Since(begun); d > 3*time.Second {
		t.Errorf("the stop took %v", d)
	}
	if _, err := net.Dial("tcp", f.address); err == nil {
		t.Error("the address still answers")
	}
}

// A fixture that ends its unit within the grace period gets its record.
func TestUnitUnderWayIsFinished(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.Grace = 10 * time.Second })
	u := newUnit("N1", "TM0000001")
	m := u.messages()
	s, err := pb.NewStationServiceClient(f.dial()).Inspect(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Send(m[0]); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Recv(); err != nil {
		t.Fatal(err)
	}
	done := make(chan error, 1)
	go func() { done <- f.stop() }()
	eventually(t, "the stop began", func() bool { return f.server.told.Err() != nil })
	for _, one := range m[1:] {
		if err := s.Send(one); err != nil {
			t.Fatal(err)
		}
	}
	recorded := false
	for {
		m, err := s.Recv()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		recorded = recorded || m.GetRecorded() != nil
	}
	if err := <-done; err != nil || !recorded || f.store.Last() != 1 {
		t.Errorf("stop %v, recorded %v, %d records", err, recorded, f.store.Last())
	}
}

func TestSecondSignalHurries(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.Grace = time.Minute })
	s, err := pb.NewStationServiceClient(f.dial()).Inspect(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Send(newUnit("N1", "TM0000001").messages()[0]); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Recv(); err != nil {
		t.Fatal(err)
	}
	done := make(chan error, 1)
	go func() { done <- f.stop() }()
	eventually(t, "the stop began", func() bool { return f.server.told.Err() != nil })
	f.server.Hurry()
	f.server.Hurry()
	if _, err := s.Recv(); status.Code(err) != codes.Unavailable {
		t.Errorf("the open inspection ended with %v, want Unavailable", err)
	}
	select {
	case err := <-done:
		if err != nil {
			t.Error(err)
		}
	case <-time.After(5 * time.Second):
		t.Fatal("still stopping 5 s after the second signal")
	}
}

// Not recording: health of the station service alone says so; looking goes on.
func TestHealthFollowsRecording(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.StoreCheck = 5 * time.Millisecond })
	f.store.Break(inspection.Faultf(inspection.Busy, "store", "no room on the disk"))
	conn := f.dial()
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	client := healthpb.NewHealthClient(conn)
	of := func(service string) healthpb.HealthCheckResponse_ServingStatus {
		m, err := client.Check(ctx, &healthpb.HealthCheckRequest{Service: service})
		if err != nil {
			t.Fatal(err)
		}
		return m.GetStatus()
	}
	eventually(t, "the station service is not serving", func() bool {
		return of("admit.v1.StationService") == healthpb.HealthCheckResponse_NOT_SERVING
	})
	if of("") != healthpb.HealthCheckResponse_SERVING || of("admit.v1.InspectionService") != healthpb.HealthCheckResponse_SERVING {
		t.Error("what only reads is not serving")
	}
	f.store.Break(nil)
	eventually(t, "the station service serves again", func() bool {
		return of("admit.v1.StationService") == healthpb.HealthCheckResponse_SERVING
	})
}

func TestListenerThatFailsEndsServe(t *testing.T) {
	f := newServer(t, nil)
	l := f.listen()
	result := make(chan error, 1)
	go func() { result <- f.server.Serve(t.Context(), Listener{l, true}) }()
	eventually(t, "the server answers", func() bool { c, err := net.Dial("tcp", l.Addr().String()); return err == nil && c.Close() == nil })
	l.Close()
	if err := <-result; err == nil {
		t.Error("Serve returned nil after its listener failed")
	}
}
