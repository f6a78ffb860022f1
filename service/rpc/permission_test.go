package rpc

import (
	"context"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"
	"google.golang.org/protobuf/types/known/emptypb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/wire"
)

// methodsOf returns every method of every service that the server has, in order.
func methodsOf(s *Server) []string {
	var all []string
	for service, info := range s.grpc.GetServiceInfo() {
		for _, m := range info.Methods {
			all = append(all, "/"+service+"/"+m.Name)
		}
	}
	slices.Sort(all)
	return all
}

// callEmpty makes a call of a method with one empty message, and returns the error of its first answer.
func callEmpty(conn *grpc.ClientConn, method string) error {
	ctx, cancel := context.WithTimeout(context.Background(), 10*time.Second)
	defer cancel()
	stream, err := conn.NewStream(ctx, &grpc.StreamDesc{ClientStreams: true, ServerStreams: true}, method)
	if err != nil {
		return err
	}
	if err := stream.SendMsg(&emptypb.Empty{}); err == nil {
		_ = stream.CloseSend() // the answer tells
	}
	return stream.RecvMsg(&emptypb.Empty{})
}

// A method without a row, or a row without a method, is a defect.
func TestEveryMethodHasARow(t *testing.T) {
	f := newServer(t, nil)
	methods := methodsOf(f.server)
	if len(methods) < 20 {
		t.Fatalf("only %d methods found: %q", len(methods), methods)
	}
	for _, m := range methods {
		if len(needs[m]) == 0 {
			t.Errorf("method %s has no row of permissions", m)
		}
	}
	for m := range needs {
		if !slices.Contains(methods, m) {
			t.Errorf("row %s has no method", m)
		}
	}
	for _, m := range reads {
		if !slices.Contains(methods, m) {
			t.Errorf("reading call %s has no method", m)
		}
	}
}

// wantPermissions is the table again, by hand and by permission: a change of the one must be meant in the other.
var wantPermissions = map[Permission]string{
	Fixture:       "Inspect PublishCalibration ReadCalibration Check List Watch",
	Operator:      "ListStations WatchStations GetInspection ListInspections WatchInspections Check List Watch",
	Supervisor:    "ListStations WatchStations GetInspection ListInspections CountInspections WatchInspections GetPartType ListPartTypes Check List Watch",
	Engineer:      "PublishCalibration ReadCalibration ListStations WatchStations GetInspection ListInspections CountInspections WatchInspections ReadSweeps PublishPartType GetPartType ListPartTypes Judge GetStoreStatus Check List Watch ServerReflectionInfo",
	Administrator: "ListStations WatchStations GetStoreStatus Check List Watch ServerReflectionInfo",
	Metrics:       "Check List Watch",
	"none":        "",
}

// Every cell of method x permission, both ways, over a real connection.
func TestEveryCellOfMethodAndPermission(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.SignsOfLife = 5 * time.Millisecond })
	conn := f.dial()
	for _, p := range append(Permissions(), "none") {
		want, ok := wantPermissions[p]
		if !ok {
			t.Fatalf("permission %q has no column in the test", p)
		}
		g := &Grant{EveryStation: true}
		if p != "none" {
			g.Permissions = []Permission{p}
		}
		if err := f.server.SetAccess(Access{Loopback: g}); err != nil {
			t.Fatal(err)
		}
		for _, m := range methodsOf(f.server) {
			may := slices.Contains(strings.Fields(want), m[strings.LastIndex(m, "/")+1:])
			err := callEmpty(conn, m)
			if denied := status.Code(err) == codes.PermissionDenied; denied == may {
				t.Errorf("%s with permission %q: %v, want allowed %v", m, p, err, may)
			}
			if c := status.Code(err); c == codes.Unimplemented || c == codes.Internal || c == codes.Unknown {
				t.Errorf("%s with permission %q: %v", m, p, err)
			}
		}
	}
}

func TestStationSpeaksForItselfOnly(t *testing.T) {
	f := newFloor(t, func(o *Options) {
		o.Access.Loopback = &Grant{Permissions: []Permission{Fixture}, Stations: []inspection.StationID{"N1", "N2"}}
	})
	conn := f.dial()
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
	mustRecord(t, conn, newUnit("N2", "TM0000002"))
	for _, other := range []string{"N3", "n1", "", "N1 ", "N1*"} {
		logged := f.log.since()
		_, err := inspectAll(t.Context(), conn, newUnit(other, "TM0000003").messages())
		wantRefused(t, err, codes.PermissionDenied, "station")
		if text := logged(); lines(text, "msg=security event=inspection_refused caller=loopback") != 1 {
			t.Errorf("station %q: want one security line, got\n%s", other, text)
		}
	}
	if f.store.Last() != 2 {
		t.Errorf("%d records, want 2", f.store.Last())
	}
}

func TestListedStationsAndContactHeads(t *testing.T) {
	f := newFloor(t, func(o *Options) {
		o.Stations = []inspection.Station{
			{Name: "N1", Line: "North", ContactHeads: []inspection.ContactHead{"N1-A", "N1-B"}}, {Name: "S1", Line: "South"},
		}
		o.Access.Loopback = &Grant{Permissions: []Permission{Fixture}, Stations: []inspection.StationID{"N1", "N9"}}
	})
	conn := f.dial()
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
	_, err := inspectAll(t.Context(), conn, newUnit("N9", "TM0000002").messages())
	if r := wantRefused(t, err, codes.PermissionDenied, "begin.station"); !strings.Contains(r.text, "N9") {
		t.Errorf("the refusal does not name the station: %v", err)
	}
	u := newUnit("N1", "TM0000002")
	u.begin.ContactHead = "S1-A"
	_, err = inspectAll(t.Context(), conn, u.messages())
	if r := wantRefused(t, err, codes.PermissionDenied, "begin.contact_head"); !strings.Contains(r.text, "S1-A") || !strings.Contains(r.text, "N1-B") {
		t.Errorf("the refusal names neither the head nor the listed ones: %v", err)
	}
	publish := func(head string) error {
		stream, err := pb.NewStationServiceClient(conn).PublishCalibration(t.Context())
		if err != nil {
			return err
		}
		c := newCalibration("cal-"+head, head)
		c.Standards = nil
		if err := stream.Send(&pb.PublishCalibrationRequest{Message: &pb.PublishCalibrationRequest_Calibration{Calibration: wire.CalibrationToProto(c, false)}}); err != nil {
			return err
		}
		_, err = stream.CloseAndRecv()
		return err
	}
	if err := publish("N1-B"); err != nil {
		t.Errorf("a fixture publishes for its own contact head: %v", err)
	}
	wantRefused(t, publish("S1-A"), codes.PermissionDenied, "calibration.contact_head")
	if err := f.server.SetAccess(Access{Loopback: &Grant{Permissions: []Permission{Engineer}}}); err != nil {
		t.Fatal(err)
	}
	if err := publish("S1-A"); err != nil {
		t.Errorf("an engineer publishes for any contact head: %v", err)
	}
}

func TestAccessIsChecked(t *testing.T) {
	for _, c := range []struct {
		name  string
		a     Access
		wants []string // each in the error
	}{
		{"good", Access{Callers: map[string]Grant{
			"n1.floor.example": {Permissions: []Permission{Fixture}, Stations: []inspection.StationID{"N1"}}, "spiffe://floor.example/engineer": {Permissions: []Permission{Engineer}},
		}}, nil},
		{"every fault at once", Access{
			Callers: map[string]Grant{
				"": {}, "*.floor.example": {}, "loopback": {}, "N1.floor.example": {}, "n1.floor.example": {},
				"n2.floor.example": {Permissions: []Permission{"root"}, Stations: []inspection.StationID{"*"}}, "a b": {},
			},
			Loopback: &Grant{Permissions: []Permission{"everything"}},
		}, []string{`caller ""`, `"*.floor.example"`, `"loopback"`, `stands twice`, `"root"`, `whole names of stations, got "*"`, `"a b"`, `"everything"`}},
	} {
		err := c.a.Check()
		if (err == nil) != (c.wants == nil) {
			t.Errorf("%s: %v", c.name, err)
		}
		for _, w := range c.wants {
			if !strings.Contains(fmt.Sprint(err), w) {
				t.Errorf("%s: want %s in the error, got\n%v", c.name, w, err)
			}
		}
	}
	f := newServer(t, nil)
	if err := f.server.SetAccess(Access{Callers: map[string]Grant{"*": {}}}); err == nil || len(f.server.book.Load().callers) != 0 {
		t.Errorf("a faulty access was taken up: %v", err)
	}
	if _, err := New(Options{}); err == nil {
		t.Error("a server without anything was made")
	}
}

// Whoever is taken out of the list while a stream of his is open is out at its next sign of life.
func TestPermissionLostDuringAWatch(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.SignsOfLife = 10 * time.Millisecond })
	watch, err := pb.NewInspectionServiceClient(f.dial()).WatchInspections(t.Context(), &pb.WatchInspectionsRequest{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := watch.Recv(); err != nil {
		t.Fatal(err)
	}
	if err := f.server.SetAccess(Access{Loopback: &Grant{}}); err != nil {
		t.Fatal(err)
	}
	for err == nil {
		_, err = watch.Recv()
	}
	if status.Code(err) != codes.PermissionDenied {
		t.Errorf("the watch ended with %v, want PermissionDenied", err)
	}
}
