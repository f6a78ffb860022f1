package storage

import (
	"context"
	"crypto/sha256"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"os"
	"sync"
	"time"

	"example.com/admit/storage/catalogue"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/disk"
)

var (
	// ErrDifferentContent says that the id was recorded with other content. The first stays.
	ErrDifferentContent = errors.New("this id was recorded with different content")
	// ErrFull says that there is no room. The entry was not recorded; sent again, it will be once there is room.
	ErrFull = disk.ErrFull
	// ErrStorageFailed says that a commit or sync failed. Nothing more is acknowledged until Reopen succeeds or the store is opened anew.
	// Whether the entry was recorded is not known; sent again after that, it is found or recorded.
	ErrStorageFailed = errors.New("storage failed")
	// ErrInUse says that another process, or another writer in this one, has the store.
	ErrInUse = errors.New("the store is in use by another process")
	// ErrLostCommit says that a volume does not reach the mark: entries that were acknowledged are not there.
	ErrLostCommit = errors.New("acknowledged entries are missing")
	// ErrBusy says that the caller's time ran out before there was room among the waiting. The entry was not recorded.
	ErrBusy = errors.New("too much is waiting to be recorded")
	// ErrTooLarge says that a submission alone exceeds what may wait.
	ErrTooLarge = errors.New("larger than everything that may wait")
	// ErrClosed says that the writer is closing or closed. The entry was not recorded.
	ErrClosed = errors.New("the store is closed")
)

// WriterOptions of a store's writer. Folder is required.
type WriterOptions struct {
	Folder string
	// Revision of the software, stored with everything it writes.
	Revision string
	// IDTerm is the name of the term that holds a submission's id. Default "id".
	IDTerm []byte
	// FilterTerms are names of further terms that Prepare looks up, so that closed volumes need not be read to know that a value is not there.
	FilterTerms [][]byte
	// VolumeBytes is the size of both files of a volume together at which the next one begins. Default 4 GiB.
	VolumeBytes int64
	// VolumeAge is the time, measured while the store is open, after which the next volume begins. Default 24 h.
	VolumeAge time.Duration
	// QueueBytes bounds what waits in memory. Default 64 MiB.
	QueueBytes int64
	// BatchBytes and BatchEntries bound one commit, so that the last of many waiting ones does not make the first wait. Default 8 MiB, 1024.
	BatchBytes   int64
	BatchEntries int
	// SetAsideDamaged makes the writer go on in a new volume when the open one is damaged. What is readable of the damaged one stays readable,
	// and its ids stay known as far as they can be read; an entry that only its damaged part knows would be recorded again.
	SetAsideDamaged bool
	// Clock dates volumes and measures ages. Default time.Now.
	Clock func() time.Time
	// Committed, where set, hears of every commit once it is on disk: how long it took and how many entries shared it. It must not block.
	Committed func(took time.Duration, entries int)
	// Logger gets what an operator should know. Default: none.
	Logger *slog.Logger
	// Files is the file system of the store's own formats: mark, checksums, filters. Default disk.OS().
	Files disk.FileSystem
	// OpenFile replaces os.OpenFile in bbolt, for tests that make a file fail.
	OpenFile func(name string, flag int, perm os.FileMode) (*os.File, error)
}

func (o WriterOptions) withDefaults() WriterOptions {
	if len(o.IDTerm) == 0 {
		o.IDTerm = []byte("id")
	}
	if o.VolumeBytes <= 0 {
		o.VolumeBytes = 4 << 30
	}
	if o.VolumeAge <= 0 {
		o.VolumeAge = 24 * time.Hour
	}
	if o.QueueBytes <= 0 {
		o.QueueBytes = 64 << 20
	}
	if o.BatchBytes <= 0 {
		o.BatchBytes = 8 << 20
	}
	if o.BatchEntries <= 0 {
		o.BatchEntries = 1024
	}
	if o.Clock == nil {
		o.Clock = time.Now
	}
	if o.Logger == nil {
		o.Logger = slog.New(slog.NewTextHandler(io.Discard, nil))
	}
	if o.Files == nil {
		o.Files = disk.OS()
	}
	return o
}

func (o WriterOptions) volume() volume.Options {
	return volume.Options{Revision: o.Revision, LimitBytes: o.VolumeBytes, Clock: o.Clock, Files: o.Files, OpenFile: o.OpenFile}
}

func (o WriterOptions) catalogue() catalogue.Options {
	return catalogue.Options{Revision: o.Revision, Clock: o.Clock, Files: o.Files}
}

// Submission is one entry to record.
type Submission struct {
	// ID names the entry for good: recording it again with the same ContentHash records nothing.
	ID          []byte
	ContentHash [sha256.Size]byte
	// Bytes is the memory that waits with it.
	Bytes int64
	// Prepare completes the entry when its sequence is known. It runs in the writer, before the commit, must be quick and must have no side
	// effects: the entry may still fail to be recorded. Sequence, ContentHash and the id's term are set by the writer. An error refuses this
	// submission and no other.
	Prepare func(sequence uint64, look Lookup) (volume.Entry, error)
}

// Lookup is what Prepare may ask: the state of the store just before its entry, earlier entries of the same commit included.
type Lookup interface {
	// Newest returns up to limit records that carry the term, newest first. With an error it still returns what it found in volumes that
	// could be read.
	Newest(term volume.Term, limit int) ([]volume.Record, error)
}

// Result says where an entry is recorded.
type Result struct {
	Sequence uint64
	Volume   uint64
	// AlreadyRecorded says that the same content was recorded before; Sequence is that of the first time.
	AlreadyRecorded bool
}

// Writer has a store open and records into it. All methods may be called by many goroutines.
type Writer struct {
	options   WriterOptions
	lock      *os.File
	catalogue *catalogue.Catalogue
	shelf     *shelf
	queue     *queue

	// The fields of the recording goroutine; it alone touches them after OpenWriter.
	mark    *mark
	failure error          // why nothing is acknowledged
	next    uint64         // at least the next sequence
	spare   *volume.Volume // made for the next roll-over, but not in the manifest yet

	sealer *sealer
	group  sync.WaitGroup

	mu      sync.Mutex
	last    position
	changed chan struct{} // closed and replaced whenever last moves
	failed  error         // failure, for others to see
	done    bool
}

// Submit records an entry and returns once it is on disk. It waits while too much is waiting already. When ctx ends before the answer, the
// error is that of ctx and the entry may be recorded or not: submit it again to find out.
func (w *Writer) Submit(ctx context.Context, s Submission) (Result, error) {
	if len(s.ID) == 0 || len(s.ID) > volume.MaxTermValue || s.Prepare == nil {
		return Result{}, fmt.Errorf("%w: id of 1 to %d bytes and Prepare are needed", volume.ErrInvalid, volume.MaxTermValue)
	}
	item := &waiting{submission: s, ctx: ctx, answer: make(chan answer, 1)}
	if err := w.queue.put(ctx, item); err != nil {
		return Result{}, err
	}
	return item.wait(ctx)
}

// Last returns the sequence of the last acknowledged entry, 0 when there is none, and a channel that is closed when a later one follows.
// Readers that stay at or below it never see an entry that could still be lost.
func (w *Writer) Last() (uint64, <-chan struct{}) {
	w.mu.Lock()
	defer w.mu.Unlock()
	return w.last.Sequence, w.changed
}

// Catalogue returns the store's catalogue.
func (w *Writer) Catalogue() *catalogue.Catalogue { return w.catalogue }

// Status are the figures an operator watches.
type Status struct {
	Last         uint64 // sequence of the last acknowledged entry
	Waiting      int    // submissions not yet answered
	WaitingBytes int64
	Failure      error         // why nothing is acknowledged, nil when all is well
	OldestRead   time.Duration // age of the oldest open read transaction
	Volumes      int
	Damaged      int // volumes that cannot be read, or were set aside
	Unsealed     int // volumes that are no longer written and not yet closed
}

// Status returns the figures of the moment.
func (w *Writer) Status() Status {
	s := Status{OldestRead: max(w.shelf.oldestRead(), w.catalogue.OldestRead())}
	s.Waiting, s.WaitingBytes = w.queue.size()
	for _, v := range w.Volumes() {
		s.Volumes++
		if v.Damage != nil {
			s.Damaged++
		} else if v.Stage == volume.Retired {
			s.Unsealed++
		}
	}
	w.mu.Lock()
	defer w.mu.Unlock()
	s.Last, s.Failure = w.last.Sequence, w.failed
	return s
}

// Close records what is waiting, refuses what comes later, and releases the store. Volumes that are being closed are left for next time.
func (w *Writer) Close() error {
	w.mu.Lock()
	if w.done {
		w.mu.Unlock()
		return nil
	}
	w.done = true
	w.mu.Unlock()
	w.queue.close()
	w.group.Wait()
	return w.release()
}

func (w *Writer) release() error {
	if w.sealer != nil {
		w.sealer.stop()
	}
	errs := []error{w.shelf.close()}
	if w.spare != nil {
		errs = append(errs, w.spare.Close())
	}
	if w.mark != nil {
		errs = append(errs, w.mark.close())
	}
	if w.catalogue != nil {
		errs = append(errs, w.catalogue.Close())
	}
	// The lock goes last: nobody else may begin while anything is still open.
	errs = append(errs, w.lock.Close())
	return errors.Join(errs...)
}
