package storage_test

import (
	"testing"
	"time"

	"example.com/admit/storage"
	"example.com/admit/storage/storagetest"
)

// backend is a store that can be closed and opened again.
type backend struct {
	*storage.Store
	options storage.Options
}

func (b backend) Restart(t *testing.T) storagetest.Backend {
	t.Helper()
	if err := b.Close(); err != nil {
		t.Fatalf("closing the store: %v", err)
	}
	return openBackend(t, b.options)
}

func openBackend(t testing.TB, o storage.Options) backend {
	t.Helper()
	s, err := storage.Open(o)
	if err != nil {
		t.Fatalf("opening the store: %v", err)
	}
	t.Cleanup(func() {
		if err := s.Close(); err != nil {
			t.Errorf("closing the store: %v", err)
		}
	})
	return backend{s, o}
}

// smallVolumes rolls over every few dozen inspections.
func smallVolumes(t testing.TB) storage.Options {
	return storage.Options{Folder: t.TempDir(), Revision: "test revision", VolumeBytes: 192 << 10, VolumeAge: time.Hour}
}

func TestContract(t *testing.T) {
	storagetest.Run(t, func(t *testing.T) storagetest.Backend { return openBackend(t, smallVolumes(t)) })
}
