package storage

import (
	"sync"
	"testing"

	"example.com/admit/service/inspection"
	"example.com/admit/storage/storagetest"
)

// BenchmarkRecord records inspections of one sweep each from sixteen stations at once, with the syncs of the disk it runs on.
func BenchmarkRecord(b *testing.B) {
	s, err := open(Options{Folder: b.TempDir()}, nil)
	if err != nil {
		b.Fatal(err)
	}
	defer s.Close()
	plant := storagetest.NewPlant(b, s)
	list := make([]storagetest.Inspection, b.N)
	for i := range list {
		list[i] = plant.Inspection(nil)
	}
	b.ResetTimer()
	var all sync.WaitGroup
	for station := range 16 {
		all.Go(func() {
			for i := station; i < len(list); i += 16 {
				if _, err := s.Record(b.Context(), list[i].Record, list[i].Sweeps); err != nil {
					b.Error(err)
					return
				}
			}
		})
	}
	all.Wait()
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "inspections/s")
}

// BenchmarkIntake is the work of one record before it waits for the disk: stored form and back, samples, terms.
func BenchmarkIntake(b *testing.B) {
	s, plant := plantWith(b)
	m := plant.Inspection(nil)
	b.ReportAllocs()
	for b.Loop() {
		if _, err := s.newIntake(b.Context(), m.Record, m.Sweeps); err != nil {
			b.Fatal(err)
		}
	}
}

// BenchmarkFind looks up ids, half of which are not there, in a store of ten volumes.
func BenchmarkFind(b *testing.B) {
	s, plant := plantWith(b)
	var ids []inspection.ID
	for i := range 200 {
		m := plant.Inspection(nil)
		if _, err := s.Record(b.Context(), m.Record, m.Sweeps); err != nil {
			b.Fatal(err)
		}
		ids = append(ids, m.Record.Begin.ID, plant.Inspection(nil).Record.Begin.ID)
		if i%20 == 19 {
			if _, err := s.CloseVolume(b.Context()); err != nil {
				b.Fatal(err)
			}
		}
	}
	i := 0
	for b.Loop() {
		if _, ok, err := s.Find(b.Context(), ids[i%len(ids)]); err != nil || ok != (i%2 == 0) {
			b.Fatal(ok, err)
		}
		i++
	}
}
