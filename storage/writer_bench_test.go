package storage

import (
	"context"
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"path/filepath"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume"
)

// typical is an inspection of the usual size: a record of 2 kB with eight index terms and one counter, and, if wanted, a sweep of 6 kB.
func typical(n uint64, withSamples bool) Submission {
	id := binary.BigEndian.AppendUint64(make([]byte, 0, 16), n)
	id = append(id, 1, 2, 3, 4, 5, 6, 7, 8)
	payload := make([]byte, 2000)
	binary.BigEndian.PutUint64(payload, n)
	entry := volume.Entry{TestedAt: tested.Add(time.Duration(n) * time.Millisecond), Payload: payload}
	for i, value := range []string{fmt.Sprintf("TM%07d", n/2), fmt.Sprintf("L26%02d", n/1000), fmt.Sprintf("N%d", n%4), "TM-25M000-F10", "pass", "production"} {
		entry.Terms = append(entry.Terms, volume.Term{Name: []byte{'a' + byte(i)}, Value: []byte(value)})
	}
	entry.Terms = append(entry.Terms, volume.Term{Name: []byte("tested"), Value: id[:8]})
	entry.Deltas = []volume.Delta{{Key: fmt.Appendf(nil, "%d/N%d/L26%02d", n/5000, n%4, n/1000), Values: []int64{1, 1, 0, 0}}}
	if withSamples {
		entry.Samples = []volume.SampleBlock{{Bytes: make([]byte, 6000)}}
	}
	return Submission{
		ID: id, ContentHash: sha256.Sum256(id), Bytes: 8000,
		Prepare: func(uint64, Lookup) (volume.Entry, error) { return entry, nil },
	}
}

// bareGroup is the least that a group committer on bbolt can be: one file, one bucket, one goroutine that takes what waits. It is what the
// writer is measured against.
type bareGroup struct {
	db    *bbolt.DB
	queue chan bareItem
	group sync.WaitGroup
}

type bareItem struct {
	key, value []byte
	done       chan error
}

func newBareGroup(b *testing.B) *bareGroup {
	db, err := bbolt.Open(filepath.Join(b.TempDir(), "bare.db"), 0o600, &bbolt.Options{
		Timeout: time.Second, FreelistType: bbolt.FreelistMapType, InitialMmapSize: 1 << 30,
	})
	if err != nil {
		b.Fatal(err)
	}
	g := &bareGroup{db: db, queue: make(chan bareItem, 1024)}
	g.group.Go(g.run)
	b.Cleanup(func() {
		close(g.queue)
		g.group.Wait()
		if err := db.Close(); err != nil {
			b.Error(err)
		}
	})
	return g
}

func (g *bareGroup) run() {
	for first := range g.queue {
		batch := []bareItem{first}
		for more := true; more && len(batch) < 1024; {
			select {
			case item, ok := <-g.queue:
				if more = ok; ok {
					batch = append(batch, item)
				}
			default:
				more = false
			}
		}
		err := g.db.Update(func(tx *bbolt.Tx) error {
			bucket, err := tx.CreateBucketIfNotExists([]byte("records"))
			for _, item := range batch {
				if err == nil {
					err = bucket.Put(item.key, item.value)
				}
			}
			return err
		})
		for _, item := range batch {
			item.done <- err
		}
	}
}

// BenchmarkCommit records typical inspections from 1, 8 and 64 goroutines, beside a bare grouped bbolt commit of as many bytes in the same run.
func BenchmarkCommit(b *testing.B) {
	for _, writers := range []int{1, 8, 64} {
		for _, withSamples := range []bool{false, true} {
			name := fmt.Sprintf("writers=%d/samples=%v", writers, withSamples)
			b.Run(name+"/bare", func(b *testing.B) {
				g := newBareGroup(b)
				size := 2300
				if withSamples {
					size += 6000
				}
				together(b, writers, func(n uint64) error {
					item := bareItem{binary.BigEndian.AppendUint64(nil, n), make([]byte, size), make(chan error, 1)}
					g.queue <- item
					return <-item.done
				})
			})
			b.Run(name+"/store", func(b *testing.B) {
				w := openWriter(b, WriterOptions{Folder: b.TempDir(), Revision: "bench", VolumeBytes: 1 << 30})
				together(b, writers, func(n uint64) error {
					_, err := w.Submit(context.Background(), typical(n, withSamples))
					return err
				})
			})
		}
	}
}

// together spreads b.N calls over goroutines.
func together(b *testing.B, goroutines int, call func(n uint64) error) {
	var next atomic.Uint64
	var group sync.WaitGroup
	b.ResetTimer()
	for range goroutines {
		group.Go(func() {
			for n := next.Add(1); n <= uint64(b.N); n = next.Add(1) {
				if err := call(n); err != nil {
					b.Error(err)
					return
				}
			}
		})
	}
	group.Wait()
	b.StopTimer()
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "entries/s")
}

// BenchmarkFindAbsent looks up an id that no volume has, as every new submission does, over many closed volumes.
func BenchmarkFindAbsent(b *testing.B) {
	for _, volumes := range []int{1, 100} {
		b.Run(fmt.Sprintf("closed=%d", volumes), func(b *testing.B) {
			w := openWriter(b, WriterOptions{Folder: b.TempDir(), Revision: "bench", VolumeBytes: 32 << 20})
			for i := range volumes {
				for _, n := range []uint64{0, uint64(i + 1), 1 << 60} {
					s := typical(n, false)
					s.ID = fmt.Appendf(s.ID, "%d", i)
					if _, err := w.Submit(context.Background(), s); err != nil {
						b.Fatal(err)
					}
				}
				if _, err := w.CloseVolume(context.Background()); err != nil {
					b.Fatal(err)
				}
			}
			r := w.draft(nil)
			n := uint64(0)
			for b.Loop() {
				// Inside the bounds of every filter, so that each has to look at its bits.
				n++
				if _, found, err := r.find(binary.BigEndian.AppendUint64(nil, 1<<50+n)); found || err != nil {
					b.Fatal(found, err)
				}
			}
		})
	}
}
