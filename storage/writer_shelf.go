package storage

import (
	"errors"
	"fmt"
	"slices"
	"sync"
	"time"

	"example.com/admit/storage/volume"
)

// shelved is one volume of the store, as far as it could be opened.
type shelved struct {
	number uint64
	volume *volume.Volume // nil when it could not be opened
	filter *volume.Filter // of a closed volume that could not be opened, where its filter could
	row    volume.Info    // its row in the manifest when the store was opened

	mu     sync.Mutex
	damage error
}

func (s *shelved) damaged() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.damage
}

func (s *shelved) setDamage(err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.damage = err
}

// setAside says whether the store goes on without what this volume can no longer tell: it was damaged before it was closed.
func (s *shelved) setAside() bool {
	return s.damaged() != nil && s.row.Stage != volume.Closed && s.info().Stage != volume.Closed
}

// info prefers what the volume says over what the manifest said.
func (s *shelved) info() volume.Info {
	if s.volume == nil {
		return s.row
	}
	info := s.volume.Info()
	if info.Stage != volume.Closed && s.damaged() != nil {
		info.Stage = volume.SetAside
	}
	return info
}

// shelf is all volumes of the store by number. The last is the open one.
type shelf struct {
	mu   sync.RWMutex
	list []*shelved
}

func (s *shelf) all() []*shelved {
	s.mu.RLock()
	defer s.mu.RUnlock()
	return slices.Clone(s.list)
}

func (s *shelf) current() *shelved {
	s.mu.RLock()
	defer s.mu.RUnlock()
	return s.list[len(s.list)-1]
}

func (s *shelf) add(v *shelved) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.list = append(s.list, v)
}

func (s *shelf) oldestRead() time.Duration {
	var oldest time.Duration
	for _, v := range s.all() {
		if v.volume != nil {
			oldest = max(oldest, v.volume.OldestRead())
		}
	}
	return oldest
}

func (s *shelf) close() error {
	var errs []error
	for _, v := range s.all() {
		if v.volume != nil {
			errs = append(errs, v.volume.Close())
		}
		if v.filter != nil {
			errs = append(errs, v.filter.Close())
		}
	}
	return errors.Join(errs...)
}

// VolumeStatus is a volume and what is wrong with it, if anything.
type VolumeStatus struct {
	volume.Info
	Damage error
}

// Volumes returns all volumes by number, the open one last.
func (w *Writer) Volumes() []VolumeStatus {
	var list []VolumeStatus
	for _, s := range w.shelf.all() {
		list = append(list, VolumeStatus{s.info(), s.damaged()})
	}
	return list
}

// Volume returns a volume for reading, or what keeps it from being read. It stays open until the writer is closed.
func (w *Writer) Volume(number uint64) (*volume.Volume, error) {
	for _, s := range w.shelf.all() {
		if s.number == number {
			if s.volume == nil {
				return nil, s.damaged()
			}
			return s.volume, nil
		}
	}
	return nil, fmt.Errorf("volume %d: %w", number, volume.ErrNotFound)
}
