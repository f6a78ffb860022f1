package storage

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"sync"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
	"example.com/admit/storage/volume"
)

// Options of a store. Folder is required.
type Options struct {
	Folder string
	// Revision of the software, kept with everything that is written.
	Revision string
	// Clock dates records, publications and volumes. Default: the wall clock.
	Clock inspection.Clock
	// VolumeBytes and VolumeAge say when the next volume begins. Default 4 GiB, 24 h.
	VolumeBytes int64
	VolumeAge   time.Duration
	// SetAsideDamaged makes the store go on in a new volume when the open one is damaged. What cannot be read of that one is then missing from
	// lists and counts without an error.
	SetAsideDamaged bool
	// Committed, where set, hears of every commit once it is on disk: how long it took and how many inspections shared it. It must not block.
	Committed func(took time.Duration, inspections int)
	// Logger gets what an operator should know. Default: none.
	Logger *slog.Logger
}

// Store keeps inspections, part types and calibrations in a folder. It implements inspection.Recorder, Catalogue, Archive and Publisher. All
// methods may be called by many goroutines.
//
// Readers never see a record before it is acknowledged, and no call keeps a read transaction open longer than one page takes. Damage that is met
// while reading is an error that matches damage.ErrDamaged and names volume and record.
type Store struct {
	writer  *Writer
	clock   inspection.Clock
	logger  *slog.Logger
	folder  string
	stopped chan struct{} // closed by Close

	encoders, decoders sync.Pool // of *volume.Encoder, *volume.Decoder

	// publishing is held while something is published: look, then write.
	publishing   sync.Mutex
	partTypes    shared[partTypeKey, inspection.Published]
	calibrations shared[inspection.CalibrationID, keptCalibration]

	mu         sync.Mutex
	versions   map[string][]int // of part types, ascending
	fullAt     time.Time        // when recording last met a full disk; zero: not since it last worked
	closed     bool
	unsureOnce bool // the log says already that attempts may be counted too low
}

// Interface checks: the compiler holds the store to the ports.
var (
	_ inspection.Recorder  = (*Store)(nil)
	_ inspection.Catalogue = (*Store)(nil)
	_ inspection.Archive   = (*Store)(nil)
	_ inspection.Publisher = (*Store)(nil)
)

type wallClock struct{}

func (wallClock) Now() time.Time { return time.Now() }

// Open opens the store in a folder, or makes one where there is nothing yet. The package comment says what is checked; errors are those of
// OpenWriter.
func Open(o Options) (*Store, error) { return open(o, nil) }

// open opens a store; change may alter what the writer is told, for tests that make its files fail.
func open(o Options, change func(*WriterOptions)) (*Store, error) {
	if o.Clock == nil {
		o.Clock = wallClock{}
	}
	if o.Logger == nil {
		o.Logger = slog.New(slog.NewTextHandler(io.Discard, nil))
	}
	wo := WriterOptions{
		Folder: o.Folder, Revision: o.Revision, IDTerm: []byte(termID),
		// Prepare asks for units, people for serials and lots: of volumes that hold none, at most 64 bytes are read.
		FilterTerms: [][]byte{[]byte(termUnit), []byte(termSerial), []byte(termLot)},
		VolumeBytes: o.VolumeBytes, VolumeAge: o.VolumeAge, SetAsideDamaged: o.SetAsideDamaged,
		Clock: o.Clock.Now, Committed: o.Committed, Logger: o.Logger,
	}
	if change != nil {
		change(&wo)
	}
	w, err := OpenWriter(wo)
	if err != nil {
		return nil, err
	}
	s := &Store{writer: w, clock: o.Clock, logger: o.Logger, folder: o.Folder, stopped: make(chan struct{})}
	s.partTypes = newShared[partTypeKey, inspection.Published](keptBytes)
	s.calibrations = newShared[inspection.CalibrationID, keptCalibration](keptBytes)
	if s.versions, err = listVersions(w.Catalogue()); err != nil {
		return nil, errors.Join(err, w.Close())
	}
	return s, nil
}

// Close records what is waiting, refuses what comes later with a Fault of kind Unavailable, and releases the folder. A second call does nothing.
func (s *Store) Close() error {
	s.mu.Lock()
	done := s.closed
	if !done {
		s.closed = true
		close(s.stopped)
	}
	s.mu.Unlock()
	if done {
		return nil
	}
	return s.writer.Close()
}

// Reopen ends the state after a failed sync: what is on disk is read anew and verified, and recording goes on. The error says what is wrong.
func (s *Store) Reopen(ctx context.Context) error { return s.writer.Reopen(ctx) }

// CloseVolume ends the open volume and returns its number once its files do not change any more; 0 when it holds nothing.
func (s *Store) CloseVolume(ctx context.Context) (uint64, error) { return s.writer.CloseVolume(ctx) }

// OldestRead returns how long the longest read transaction that is still open has lasted, 0 when there is none.
func (s *Store) OldestRead() time.Duration { return s.writer.Status().OldestRead }

// check returns why a call cannot begin: its context has ended, or the store is closed.
func (s *Store) check(ctx context.Context) error {
	if err := ctx.Err(); err != nil {
		return err
	}
	select {
	case <-s.stopped:
		return closedFault()
	default:
		return nil
	}
}

func closedFault() error {
	return inspection.Faultf(inspection.Unavailable, "store", "%w", ErrClosed)
}

// faultOf turns an error of writing into one that says what the sender may do. Errors of the caller's context, and faults, stay as they are.
func (s *Store) faultOf(err error) error {
	var f *inspection.Fault
	switch {
	case err == nil || errors.As(err, &f):
		return err
	case errors.Is(err, ErrFull):
		return inspection.Faultf(inspection.Busy, "store", "the disk is full, nothing was kept; send it again when there is room: %w", err)
	case errors.Is(err, ErrBusy), errors.Is(err, ErrTooLarge):
		return inspection.Faultf(inspection.Busy, "store", "%w", err)
	case errors.Is(err, ErrStorageFailed), errors.Is(err, ErrClosed):
		return inspection.Faultf(inspection.Unavailable, "store", "%w", err)
	case errors.Is(err, volume.ErrInvalid):
		return inspection.Faultf(inspection.Malformed, "inspection", "%w", err)
	}
	return err
}

// keptCalibration is a calibration with its two hashes: that of its canonical content, which records state, and that of its stored bytes, which
// names the object in a volume.
type keptCalibration struct {
	calibration *network.Calibration
	hash        [32]byte
	object      volume.Object
}

// Record checks, completes and records an inspection, and returns once it is on disk. It refuses what could not be read back (Malformed) and a
// record whose part type or calibration is not published with the hash it states (Unknown): a volume is complete evidence.
func (s *Store) Record(ctx context.Context, r *inspection.Record, sweeps []sweep.Sweep) (inspection.Recorded, error) {
	if err := s.check(ctx); err != nil {
		return inspection.Recorded{}, err
	}
	in, err := s.newIntake(ctx, r, sweeps)
	if err != nil {
		return inspection.Recorded{}, err
	}
	result, err := s.writer.Submit(ctx, Submission{ID: in.id[:], ContentHash: r.ContentHash, Bytes: in.size(), Prepare: in.complete})
	s.noteFull(err)
	switch {
	case errors.Is(err, ErrDifferentContent):
		return inspection.Recorded{}, inspection.Faultf(inspection.Conflict, "inspection", "%s: %w; what came now has hash %x", in.id, err, r.ContentHash)
	case err != nil:
		return inspection.Recorded{}, s.faultOf(err)
	case result.AlreadyRecorded:
		first, err := s.recordAt(result.Volume, result.Sequence)
		return inspection.Recorded{Record: first, Already: true}, err
	}
	return inspection.Recorded{Record: in.kept}, nil
}

func (s *Store) recordAt(number, sequence uint64) (*inspection.Record, error) {
	v, err := s.writer.Volume(number)
	if err != nil {
		return nil, err
	}
	stored, err := v.Record(sequence)
	if err != nil {
		return nil, fmt.Errorf("inspection with sequence %d: %w", sequence, err)
	}
	return decodeRecord(number, stored)
}
