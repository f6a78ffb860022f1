package rpc

import (
	"context"
	"fmt"
	"math/rand/v2"
	"runtime"
	"sync"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/credentials/insecure"
	"google.golang.org/grpc/status"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
)

// put records an inspection without a stream. size makes its judgement about so many bytes long.
func (f *testFloor) put(station string, size int) *inspection.Record {
	f.t.Helper()
	u := newUnit(station, "TM0000001")
	p, err := f.store.PartType(context.Background(), partType, 0)
	if err != nil {
		f.t.Fatal(err)
	}
	r := &inspection.Record{Begin: u.begin, PartType: inspection.Applied{PartTypeRef: inspection.PartTypeRef{Name: p.Name, Version: p.Version}, Hash: p.Hash()}}
	r.Judgement.Verdict = verdict.Pass
	if size > 0 {
		r.Judgement.Findings = []verdict.Finding{{Quantity: parttype.MotionalResistance, Where: verdict.Nowhere, Text: fmt.Sprintf("%0*d", size, 1), Outcome: verdict.Conforms}}
	}
	kept, err := f.store.Record(context.Background(), r, nil)
	if err != nil {
		f.t.Fatal(err)
	}
	return kept.Record
}

// A watcher is cut off at random places and goes on from its last token: no gap, no repeat, signs of life skipped.
func TestWatchResumesWithoutGapOrRepeat(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.SignsOfLife = 2 * time.Millisecond })
	conn := f.dial()
	client := pb.NewInspectionServiceClient(conn)
	const units = 400
	seed := rand.Uint64()
	t.Log("seed", seed)
	random := rand.New(rand.NewPCG(seed, 1))
	f.put("N1", 0) // before the watch: not told
	ctx, cancel := context.WithCancel(t.Context())
	watch, err := client.WatchInspections(ctx, &pb.WatchInspectionsRequest{})
	if err != nil {
		t.Fatal(err)
	}
	m, err := watch.Recv() // a sign of life: from here on everything is told
	if err != nil || m.GetInspection() != nil {
		t.Fatal(m, err)
	}
	beginning := m.GetResumeToken()
	token := beginning
	var writer sync.WaitGroup
	writer.Go(func() {
		for i := range units {
			f.put([]string{"N1", "N2"}[i%2], 0)
		}
	})
	defer writer.Wait()
	for next := uint64(2); next < units+2; {
		if random.IntN(20) == 0 {
			cancel()
			ctx, cancel = context.WithCancel(t.Context())
			if watch, err = client.WatchInspections(ctx, &pb.WatchInspectionsRequest{ResumeToken: token}); err != nil {
				t.Fatal(err)
			}
		}
		m, err := watch.Recv()
		if err != nil {
			t.Fatal(err)
		}
		token = m.GetResumeToken()
		if m.GetInspection() == nil {
			continue
		}
		if got := m.GetInspection().GetSequence(); got != next {
			t.Fatalf("told of sequence %d, want %d", got, next)
		}
		next++
	}
	// And once more in one go, over several pages.
	if watch, err = client.WatchInspections(ctx, &pb.WatchInspectionsRequest{ResumeToken: beginning}); err != nil {
		t.Fatal(err)
	}
	for next := uint64(2); next < units+2; next++ {
		m, err := watch.Recv()
		if err != nil || m.GetInspection().GetSequence() != next {
			t.Fatalf("told of %v, %v; want sequence %d", m.GetInspection().GetSequence(), err, next)
		}
	}
	cancel()
}

func TestWatchOfOneStation(t *testing.T) {
	f := newFloor(t, func(o *Options) { o.SignsOfLife = 5 * time.Millisecond })
	client := pb.NewInspectionServiceClient(f.dial())
	watch, err := client.WatchInspections(t.Context(), &pb.WatchInspectionsRequest{Station: "N2"})
	if err != nil {
		t.Fatal(err)
	}
	first, err := watch.Recv()
	if err != nil {
		t.Fatal(err)
	}
	for range 5 {
		f.put("N1", 0)
	}
	want := f.put("N2", 0)
	for {
		m, err := watch.Recv()
		if err != nil {
			t.Fatal(err)
		}
		if i := m.GetInspection(); i != nil {
			if i.GetSequence() != want.Sequence {
				t.Errorf("told of sequence %d, want %d", i.GetSequence(), want.Sequence)
			}
			break
		}
	}
	for name, r := range map[string]*pb.WatchInspectionsRequest{
		"a token of another station": {ResumeToken: first.GetResumeToken(), Station: "N1"},
		"a text that is no token":    {ResumeToken: "17"},
		"a token of a list":          {ResumeToken: makeToken("inspections", "", "3")},
		"a token of another store":   {ResumeToken: makeToken("watch", "", "99")},
		"a token without position":   {ResumeToken: makeToken("watch", "", "x")},
	} {
		bad, err := client.WatchInspections(t.Context(), r)
		if err != nil {
			t.Fatal(err)
		}
		_, err = bad.Recv()
		if wantRefused(t, err, codes.InvalidArgument, "resume_token"); t.Failed() {
			t.Errorf("%s", name)
		}
	}
}

// One watcher that never reads and one that is slow beside good ones, 500 inspections a second (promise P9, small): the good ones lag
// little, the dead one is cut off and leaves nothing behind, memory stays.
func TestSlowWatchersHarmNobody(t *testing.T) {
	f := newFloor(t, func(o *Options) {
		o.Patience = 300 * time.Millisecond
		o.SignsOfLife = 50 * time.Millisecond
	})
	seconds := 3
	if testing.Short() {
		seconds = 1
	}
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	open := func() grpc.ServerStreamingClient[pb.WatchInspectionsResponse] {
		w, err := pb.NewInspectionServiceClient(f.dial(
			grpc.WithTransportCredentials(insecure.NewCredentials()), grpc.WithInitialWindowSize(65535), grpc.WithInitialConnWindowSize(65535),
		)).WatchInspections(ctx, &pb.WatchInspectionsRequest{})
		if err != nil {
			t.Fatal(err)
		}
		if _, err := w.Recv(); err != nil {
			t.Fatal(err)
		}
		return w
	}
	dead, slow := open(), open()
	const size = 2000 // bytes of each message, so that windows fill
	total := 500 * seconds
	var mu sync.Mutex
	var worst time.Duration
	written := map[uint64]time.Time{}
	var watchers sync.WaitGroup
	for range 5 {
		good := open()
		watchers.Go(func() {
			for n := 0; n < total; {
				m, err := good.Recv()
				if err != nil {
					t.Error("a good watcher was cut off:", err)
					return
				}
				if i := m.GetInspection(); i != nil {
					now := time.Now()
					mu.Lock()
					worst = max(worst, now.Sub(written[i.GetSequence()]))
					mu.Unlock()
					n++
				}
			}
		})
	}
	watchers.Go(func() {
		for range 2 { // a message a second or so
			if _, err := slow.Recv(); err != nil {
				return
			}
			time.Sleep(time.Duration(seconds) * 400 * time.Millisecond)
		}
	})
	var before runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&before)
	tick := time.NewTicker(2 * time.Millisecond)
	defer tick.Stop()
	for range total {
		<-tick.C
		mu.Lock()
		written[f.store.Last()+1] = time.Now()
		mu.Unlock()
		f.put("N1", size)
	}
	watchers.Wait()
	if worst > 500*time.Millisecond {
		t.Errorf("a good watcher lagged by %v", worst)
	}
	eventually(t, "only the good watchers are left", func() bool { return f.server.Streams() == 5 })
	var after runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&after)
	if grown := int64(after.HeapAlloc) - int64(before.HeapAlloc); grown > int64(total*size)*4+32<<20 {
		t.Errorf("memory grew by %d MiB", grown>>20)
	}
	// What the dead watcher finds when it wakes: a part of the story, then its end with a token that leads to the rest.
	var last, n uint64
	for {
		m, err := dead.Recv()
		if err != nil {
			r := refusalOf(t, err)
			if r.code != codes.ResourceExhausted || r.metadata["resume_token"] == "" {
				t.Fatalf("the dead watcher was ended with %v, want ResourceExhausted with a token", err)
			}
			resumed, err := pb.NewInspectionServiceClient(f.dial()).WatchInspections(ctx, &pb.WatchInspectionsRequest{ResumeToken: r.metadata["resume_token"]})
			if err != nil {
				t.Fatal(err)
			}
			dead = resumed
			continue
		}
		if i := m.GetInspection(); i != nil {
			if i.GetSequence() != last+1 {
				t.Fatalf("the dead watcher was told of sequence %d after %d", i.GetSequence(), last)
			}
			last, n = i.GetSequence(), n+1
		}
		if n == uint64(total) {
			break
		}
	}
}

func TestWatchStations(t *testing.T) {
	f := newFloor(t, func(o *Options) {
		o.Stations = []inspection.Station{{Name: "S1", Line: "South"}, {Name: "N1", Line: "North"}, {Name: "N2", Line: "North"}}
		o.SignsOfLife = 20 * time.Millisecond
	})
	conn := f.dial()
	client := pb.NewStationServiceClient(conn)
	watch, err := client.WatchStations(t.Context(), &pb.WatchStationsRequest{})
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for range 3 {
		m, err := watch.Recv()
		if err != nil {
			t.Fatal(err)
		}
		names = append(names, m.GetStation().GetLine()+" "+m.GetStation().GetStation())
	}
	if fmt.Sprint(names) != "[North N1 North N2 South S1]" {
		t.Errorf("stations %v, want them by line and name", names)
	}
	if m, err := watch.Recv(); err != nil || m.GetStation() != nil {
		t.Errorf("%v, %v; want a sign of life", m, err)
	}
	u := newUnit("N2", "TM0000007")
	u.begin.Unit.Lot = "RETEST"
	mustRecord(t, conn, u)
	for {
		m, err := watch.Recv()
		if err != nil {
			t.Fatal(err)
		}
		s := m.GetStation()
		if s == nil || s.GetLastInspection() == nil {
			continue
		}
		l := s.GetLastInspection()
		if s.GetStation() != "N2" || s.GetContactHead() != "N2-A" || l.GetVerdict() != pb.Verdict_VERDICT_RETEST || l.GetUnit().GetSerial() != "TM0000007" ||
			len(l.GetReasons()) == 0 || l.GetReasons()[0] != "The noise is too high. (too_noisy)" || l.GetAdvice() == "" || l.GetSequence() != 1 || s.GetLastSeenAt() == nil {
			t.Errorf("station told as %v", s)
		}
		break
	}
	list, err := client.ListStations(t.Context(), &pb.ListStationsRequest{Line: "South"})
	if err != nil || len(list.GetStations()) != 1 || list.GetStations()[0].GetStation() != "S1" || list.GetStations()[0].GetLastSeenAt() != nil {
		t.Errorf("stations of line South: %v, %v", list, err)
	}
	one, err := client.WatchStations(t.Context(), &pb.WatchStationsRequest{Station: "S1"})
	if err != nil {
		t.Fatal(err)
	}
	if m, err := one.Recv(); err != nil || m.GetStation().GetStation() != "S1" {
		t.Errorf("watch of S1: %v, %v", m, err)
	}
	stream, err := client.Inspect(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if err := stream.Send(newUnit("S1", "TM0000008").messages()[0]); err != nil {
		t.Fatal(err)
	}
	for connected := false; !connected; {
		m, err := one.Recv()
		if err != nil {
			t.Fatal(err)
		}
		connected = m.GetStation().GetConnected()
	}
	if err := stream.CloseSend(); err != nil {
		t.Fatal(err)
	}
	for connected := true; connected; {
		m, err := one.Recv()
		if err != nil {
			t.Fatal(err)
		}
		connected = m.GetStation() == nil || m.GetStation().GetConnected()
	}
	if _, err := client.ListStations(t.Context(), &pb.ListStationsRequest{Line: string(make([]byte, 200))}); status.Code(err) != codes.InvalidArgument {
		t.Errorf("a line of 200 bytes: %v", err)
	}
}
