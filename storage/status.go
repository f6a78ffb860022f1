package storage

import (
	"context"
	"errors"
	"fmt"
	"time"

	"golang.org/x/sys/unix"

	"example.com/admit/service/inspection"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/envelope"
)

const (
	// fullFor is how long the store calls itself full after a record met a full disk. Then the next record is the test.
	fullFor = 5 * time.Second
	// fullBelow is the room under which a disk that was full is still full: less than a commit and the roll-over to a new volume may take.
	fullBelow = 16 << 20
)

// noteFull remembers what the last record met.
func (s *Store) noteFull(err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	switch {
	case errors.Is(err, ErrFull):
		s.fullAt = s.clock.Now()
	case err == nil:
		s.fullAt = time.Time{}
	}
}

// full says whether recording stands still for want of room.
func (s *Store) full(freeBytes uint64) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.fullAt.IsZero() {
		return false
	}
	// A clock that was set back makes this negative: no reason to stay full.
	since := s.clock.Now().Sub(s.fullAt)
	return freeBytes < fullBelow || since >= 0 && since < fullFor
}

// Status describes the store. It reads no entry and answers at once.
func (s *Store) Status(ctx context.Context) (inspection.StoreStatus, error) {
	if err := s.check(ctx); err != nil {
		return inspection.StoreStatus{}, err
	}
	free, err := freeBytes(s.folder)
	if err != nil {
		return inspection.StoreStatus{}, fmt.Errorf("room on the disk of the store: %w", err)
	}
	w := s.writer.Status()
	status := inspection.StoreStatus{Recording: true, Last: w.Last, FreeBytes: free, Schema: envelope.Schema}
	switch {
	case w.Failure != nil:
		status.Recording, status.Fault = false, fmt.Sprintf("storage failed: %v", w.Failure)
	case s.full(free):
		status.Recording, status.Fault = false, fmt.Sprintf("the disk is full, %d bytes are free", free)
	}
	for _, v := range s.writer.Volumes() {
		status.Inspections += v.Records
		status.Volumes = append(status.Volumes, inspection.VolumeStatus{
			Number: uint32(v.Number), Open: v.Stage == volume.Open, FirstSequence: v.FirstSequence, LastSequence: v.LastSequence,
			MeasuredFrom: v.FirstTested, MeasuredUntil: v.LastTested, Inspections: v.Records,
			RecordBytes: uint64(max(0, v.RecordsBytes)), SampleBytes: uint64(max(0, v.SamplesBytes)),
		})
	}
	return status, nil
}

// freeBytes returns what an ordinary process may still write on the file system of a folder.
func freeBytes(folder string) (uint64, error) {
	var st unix.Statfs_t
	if err := unix.Statfs(folder, &st); err != nil {
		return 0, err
	}
	return uint64(st.Bavail) * uint64(st.Bsize), nil
}
