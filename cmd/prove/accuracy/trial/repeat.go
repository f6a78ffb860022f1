package trial

import (
	"hash/fnv"
	"math/rand/v2"
	"runtime"
	"sync"
	"sync/atomic"
)

// Repeat runs trials on every core and returns their outcomes in order. worker is called once for each core and returns what runs one trial,
// with whatever buffers it keeps for itself.
func Repeat[T any](seed uint64, cell string, trials int, worker func() func(rng *rand.Rand) T) []T {
	out := make([]T, trials)
	stream := fnv.New64a()
	stream.Write([]byte(cell)) // never fails
	key := seed ^ stream.Sum64()
	var next atomic.Int64
	var all sync.WaitGroup
	for range min(runtime.GOMAXPROCS(0), trials) {
		all.Go(func() {
			run := worker()
			for {
				i := int(next.Add(1)) - 1
				if i >= trials {
					return
				}
				out[i] = run(rand.New(rand.NewPCG(key, uint64(i))))
			}
		})
	}
	all.Wait()
	return out
}
