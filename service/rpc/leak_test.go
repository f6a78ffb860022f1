package rpc

import (
	"context"
	"math/rand/v2"
	"os"
	"runtime"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/credentials/insecure"
	"google.golang.org/grpc/metadata"

	pb "example.com/admit/api/admit/v1"
)

func callMetadataAs(t *testing.T, f *testFloor, name string) error {
	t.Helper()
	return callMetadata(metadata.AppendToOutgoingContext(t.Context(), callerKey, name), f.dial())
}

// files returns how many file descriptors the process has open, -1 where the system does not say.
func files() int {
	entries, err := os.ReadDir("/proc/self/fd")
	if err != nil {
		return -1
	}
	return len(entries)
}

// Connect, begin, cancel at a random stage, again and again (promise P24, small): goroutines, files and memory stay.
func TestNothingLeaks(t *testing.T) {
	f := newFloor(t, nil)
	rounds := 3000
	if testing.Short() {
		rounds = 300
	}
	seed := rand.Uint64()
	t.Log("seed", seed)
	random := rand.New(rand.NewPCG(seed, 2))
	round := func() {
		conn, err := grpc.NewClient("passthrough:///"+f.address, grpc.WithTransportCredentials(insecure.NewCredentials()), grpc.WithNoProxy())
		if err != nil {
			t.Fatal(err)
		}
		defer conn.Close()
		ctx, cancel := context.WithCancel(t.Context())
		defer cancel()
		s, err := pb.NewStationServiceClient(conn).Inspect(ctx)
		if err != nil {
			t.Fatal(err)
		}
		m := newUnit("N1", "TM0000001").messages()
		for _, one := range m[:random.IntN(len(m)+1)] {
			if err := s.Send(one); err != nil {
				t.Fatal(err)
			}
		}
		for range random.IntN(3) {
			if random.IntN(2) == 0 {
				time.Sleep(time.Duration(random.IntN(300)) * time.Microsecond)
			}
		}
	}
	settle := func() (goroutines, open int, heap uint64) {
		eventually(t, "the streams are gone", func() bool { return f.server.Streams() == 0 })
		// The transport ends its goroutines and files a little later.
		last := -1
		eventually(t, "the goroutines have settled", func() bool {
			was := last
			last = runtime.NumGoroutine() + files()
			time.Sleep(10 * time.Millisecond)
			return was == last
		})
		runtime.GC()
		runtime.GC()
		var m runtime.MemStats
		runtime.ReadMemStats(&m)
		return runtime.NumGoroutine(), files(), m.HeapAlloc
	}
	for range 50 { // pools and tables fill
		round()
	}
	goroutines, open, heap := settle()
	recorded := f.store.Last()
	for range rounds {
		round()
	}
	g, o, h := settle()
	if g > goroutines+5 || o > open {
		t.Errorf("goroutines %d -> %d, files %d -> %d", goroutines, g, open, o)
	}
	// The store keeps what was recorded: 401 complex points with their frequencies, and the record.
	kept := (f.store.Last() - recorded) * (401*24 + 8192)
	// The test's own log is in memory too.
	kept += uint64(f.log.size())
	if h > heap+heap/10+kept+1<<20 {
		t.Errorf("memory %d -> %d KiB with %d KiB recorded", heap>>10, h>>10, kept>>10)
	}
	if f.server.budget.held.Load() != 0 {
		t.Error("points are still held")
	}
	for _, s := range f.server.Board().Latest() {
		if s.Connected {
			t.Errorf("station %s is still connected", s.Name)
		}
	}
}
