package pagefile

import (
	"errors"
	"fmt"
	"os"
	"runtime/debug"
	"sync"
	"time"

	"go.etcd.io/bbolt"
	bolterrors "go.etcd.io/bbolt/errors"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/tree"
)

var (
	// ErrFailed says that a commit or sync failed in a way that leaves the state on disk in doubt. Nothing more is written to the file
	// until it is opened again, and checked.
	ErrFailed = errors.New("a commit failed, the file must be reopened and verified")
	// ErrLocked says that another process, or another opener in this one, has the file.
	ErrLocked = errors.New("the file is in use")
	// ErrClosed says that the file was closed.
	ErrClosed = errors.New("the file is closed")
)

// Options of an open file. The zero value is usable.
type Options struct {
	// MapBytes is mapped at once, so that growth up to it never waits for readers. Address space only, not memory. Default 64 MiB.
	MapBytes int64
	// GrowBytes is the step in which the file grows on disk. Default 4 MiB.
	GrowBytes int64
	// LockTimeout bounds the wait for another process's lock. Default 1 s.
	LockTimeout time.Duration
	// Clock measures the age of reads. Default time.Now.
	Clock func() time.Time
	// OpenFile replaces os.OpenFile in bbolt, for tests that make the file fail.
	OpenFile func(name string, flag int, perm os.FileMode) (*os.File, error)
}

func (o Options) withDefaults() Options {
	if o.MapBytes <= 0 {
		o.MapBytes = 64 << 20
	}
	if o.GrowBytes <= 0 {
		o.GrowBytes = 4 << 20
	}
	if o.LockTimeout <= 0 {
		o.LockTimeout = time.Second
	}
	if o.Clock == nil {
		o.Clock = time.Now
	}
	return o
}

// File is a bbolt file open for writing. Update must not be called by two goroutines at once; everything else may.
type File struct {
	path    string
	options Options
	db      *bbolt.DB
	pages   *os.File // for reading, beside bbolt's own

	mu        sync.Mutex
	failure   error // set once, by a commit that left doubt
	stuck     bool  // bbolt panicked while holding its locks: it can no longer be closed
	highWater uint64
	reads     map[uint64]time.Time
	nextRead  uint64
}

// Create writes a new file at path with what fill puts into it, and syncs it. The name is not durable until the caller syncs the folder.
func Create(path string, fill func(tx *bbolt.Tx) error) error {
	// One sync at the end suffices: until the caller renames it into place the file means nothing.
	db, err := bbolt.Open(path, 0o640, &bbolt.Options{
		PageSize: tree.PageSize, Timeout: time.Second, NoSync: true, NoGrowSync: true, FreelistType: bbolt.FreelistMapType,
	})
	if err != nil {
		return fmt.Errorf("create %s: %w", path, disk.Classify(err))
	}
	err = db.Update(fill)
	if err == nil {
		err = db.Sync()
	}
	if err = errors.Join(err, db.Close()); err != nil {
		return fmt.Errorf("create %s: %w", path, disk.Classify(err))
	}
	return nil
}

// Open checks the file at path, every page of its structure, and opens it for writing. What is wrong with it is a *damage.Error naming
// the file; the file is then left as it was. A missing file satisfies os.ErrNotExist: Open never creates one.
func Open(path string, options Options) (*File, error) {
	o := options.withDefaults()
	meta, err := Check(path)
	if err != nil {
		return nil, err
	}
	db, err := openBolt(path, o)
	if err != nil {
		return nil, err
	}
	db.AllocSize = int(o.GrowBytes)
	pages, err := os.Open(path)
	if err != nil {
		return nil, errors.Join(err, db.Close())
	}
	return &File{
		path: path, options: o, db: db, pages: pages,
		highWater: meta.HighWater, reads: make(map[uint64]time.Time),
	}, nil
}

// Check reads the structure of a file nobody writes and returns its state, or the first damage found.
func Check(path string) (tree.Meta, error) {
	file, err := os.Open(path)
	if err != nil {
		return tree.Meta{}, err
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		return tree.Meta{}, err
	}
	meta, err := tree.ReadMeta(file, info.Size())
	if err != nil {
		return tree.Meta{}, damage.Locate(err, 0, path)
	}
	if problems := tree.Check(file, meta); len(problems) > 0 {
		return tree.Meta{}, damage.Locate(problems[0], 0, path)
	}
	return meta, nil
}

func openBolt(path string, o Options) (db *bbolt.DB, err error) {
	// The file was checked a moment ago, so a fault here means that it changed meanwhile: still an error, not an end.
	defer debug.SetPanicOnFault(debug.SetPanicOnFault(true))
	defer func() {
		if r := recover(); r != nil {
			db, err = nil, damage.InFile(path, "bbolt cannot open it: %v", r)
		}
	}()
	db, err = bbolt.Open(path, 0o640, &bbolt.Options{
		PageSize: tree.PageSize, Timeout: o.LockTimeout, FreelistType: bbolt.FreelistMapType,
		InitialMmapSize: int(o.MapBytes), NoStatistics: true, OpenFile: o.OpenFile,
	})
	if errors.Is(err, bolterrors.ErrTimeout) {
		return nil, fmt.Errorf("%s: %w", path, ErrLocked)
	}
	return db, err
}

// Path returns where the file is.
func (f *File) Path() string { return f.path }

// Bytes returns how much of the file is in use as of the last commit.
func (f *File) Bytes() int64 {
	f.mu.Lock()
	defer f.mu.Unlock()
	return int64(f.highWater) * tree.PageSize
}

// View runs read with a reader of the newest commit.
func (f *File) View(read func(*tree.Reader) error) error {
	tx, err := f.db.Begin(false)
	if err != nil {
		if errors.Is(err, bolterrors.ErrDatabaseNotOpen) {
			err = ErrClosed
		}
		return fmt.Errorf("%s: %w", f.path, err)
	}
	id := f.began()
	defer func() {
		f.ended(id)
		// Rolling back a read transaction cannot fail; it releases the pages.
		_ = tx.Rollback()
	}()
	root := uint64(tx.Cursor().Bucket().Root())
	reader := tree.NewReader(tree.FileSource{File: f.pages}, root, uint64(tx.Size())/tree.PageSize)
	return damage.Locate(read(reader), 0, f.path)
}

func (f *File) began() uint64 {
	f.mu.Lock()
	defer f.mu.Unlock()
	f.nextRead++
	f.reads[f.nextRead] = f.options.Clock()
	return f.nextRead
}

func (f *File) ended(id uint64) {
	f.mu.Lock()
	defer f.mu.Unlock()
	delete(f.reads, id)
}

// OldestRead returns how long the longest View that is still running has lasted, 0 when there is none.
func (f *File) OldestRead() time.Duration {
	f.mu.Lock()
	defer f.mu.Unlock()
	var oldest time.Duration
	now := f.options.Clock()
	for _, start := range f.reads {
		oldest = max(oldest, now.Sub(start))
	}
	return oldest
}

// Close releases the file after the Views that run. It is safe to call twice.
func (f *File) Close() error {
	f.mu.Lock()
	stuck := f.stuck
	f.mu.Unlock()
	if stuck {
		// bbolt would wait for its own lock for ever. Its descriptor and lock stay until the process ends.
		return ErrFailed
	}
	err := f.db.Close()
	if closeErr := f.pages.Close(); closeErr != nil && !errors.Is(closeErr, os.ErrClosed) {
		err = errors.Join(err, closeErr)
	}
	return err
}
