package rpc

import (
	"context"
	"log/slog"
	"testing"

	"google.golang.org/grpc"
	"google.golang.org/grpc/credentials/insecure"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/storage/memory"
)

// One inspection of one sweep of 401 points from Begin to Recorded on a loopback connection, with a judge and a store that take no time:
// what the edge itself costs. Stations: how many send at once, each on its own connection.
func BenchmarkInspect(b *testing.B) {
	for _, stations := range []int{1, 8} {
		b.Run(map[int]string{1: "stations=1", 8: "stations=8"}[stations], func(b *testing.B) { benchmarkInspect(b, stations) })
	}
}

func benchmarkInspect(b *testing.B, stations int) {
	store := memory.New(wallClock{})
	p, err := parttype.Parse("part-type.yaml", limitsFile(b, partType))
	if err != nil {
		b.Fatal(err)
	}
	if _, _, err := store.PublishPartType(b.Context(), p, "test"); err != nil {
		b.Fatal(err)
	}
	s, err := New(Options{
		Desk:    &inspection.Desk{Judge: judgeFunc(judgeByLot), Recorder: store, Catalogue: store, Clock: wallClock{}, Observer: &listener{}},
		Archive: store, Publisher: store, Log: slog.New(slog.DiscardHandler),
	})
	if err != nil {
		b.Fatal(err)
	}
	f := &testFloor{server: s}
	l := listenForBenchmark(b)
	ctx, cancel := context.WithCancel(context.Background())
	result := make(chan error, 1)
	go func() { result <- s.Serve(ctx, Listener{l, true}) }()
	f.address = l.Addr().String()
	defer func() { cancel(); <-result }()
	work := make(chan struct{})
	done := make(chan error)
	for range stations {
		conn, err := grpc.NewClient("passthrough:///"+f.address, grpc.WithTransportCredentials(insecure.NewCredentials()), grpc.WithNoProxy())
		if err != nil {
			b.Fatal(err)
		}
		defer conn.Close()
		go func() {
			for range work {
				_, err := inspectAll(context.Background(), conn, newUnit("N1", "TM0000001").messages())
				done <- err
			}
		}()
	}
	defer close(work)
	b.ResetTimer()
	go func() {
		for range b.N {
			work <- struct{}{}
		}
	}()
	for range b.N {
		if err := <-done; err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "inspections/s")
}
