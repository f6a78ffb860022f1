package volume

import (
	"crypto/rand"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"time"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// Stage is where a volume is in its life. It only moves forward.
type Stage int

// The stages. SetAside is not one a volume reaches by itself: the store gives it to one that was damaged while it was open, and it is
// never closed, because damage must not be sealed in.
const (
	Open     Stage = iota + 1 // being written
	Retired                   // no longer written
	Closed                    // no longer written, with page checksums and filter
	SetAside                  // no longer written because of damage
)

// String returns the word for it.
func (s Stage) String() string {
	switch s {
	case Open:
		return "open"
	case Retired:
		return "retired"
	case Closed:
		return "closed"
	case SetAside:
		return "set aside"
	}
	return fmt.Sprintf("stage %d", int(s))
}

// Options of a volume.
type Options struct {
	// Revision of the software, stored with everything it writes.
	Revision string
	// LimitBytes is the size the volume is meant to reach: that much address space is mapped at once. Default 1 GiB.
	LimitBytes int64
	// Clock dates the volume and measures its age and that of reads. Default time.Now.
	Clock func() time.Time
	// Files is the file system for renames, checksums and filters. Default disk.OS().
	Files disk.FileSystem
	// OpenFile replaces os.OpenFile in bbolt, for tests that make a volume's files fail.
	OpenFile func(name string, flag int, perm os.FileMode) (*os.File, error)
}

func (o Options) withDefaults() Options {
	if o.LimitBytes <= 0 {
		o.LimitBytes = 1 << 30
	}
	if o.Clock == nil {
		o.Clock = time.Now
	}
	if o.Files == nil {
		o.Files = disk.OS()
	}
	return o
}

func (o Options) pagefile() pagefile.Options {
	// Some headroom: the last commit before the roll-over may exceed the limit, and must not wait for readers to map more.
	return pagefile.Options{MapBytes: o.LimitBytes + o.LimitBytes/8, Clock: o.Clock, OpenFile: o.OpenFile}
}

// viewer gives short read access to one state of a file.
type viewer interface {
	View(read func(*tree.Reader) error) error
	Bytes() int64
}

// Volume is one volume. Append, Retire, Seal and Close must not be called by two goroutines at once; reads may run beside all of them.
type Volume struct {
	folder   string
	options  Options
	identity identity

	// life is held for reading during each read, for writing while the volume moves from stage to stage.
	life    sync.RWMutex
	stage   Stage
	records viewer
	samples viewer // nil when retention dropped the file
	sums    *sums
	filter  *Filter

	mu          sync.Mutex
	state       state
	samplesLast uint64 // highest sequence in the samples file, orphans included
	openedAt    time.Time
	revision    uint64            // number of options.Revision in the records file, 0 before the first commit
	revisions   map[uint64]string // texts read so far
	objects     map[ObjectRef]bool
}

// Create makes an empty volume in the store folder and opens it. It appears under its name whole or not at all: the files are made in a
// folder with a temporary name, synced and renamed.
func Create(store string, number uint64, options Options) (*Volume, error) {
	o := options.withDefaults()
	if number == 0 {
		return nil, invalid("volumes are numbered from 1")
	}
	who := identity{number: number, createdAt: o.Clock()}
	if _, err := rand.Read(who.id[:]); err != nil {
		return nil, err
	}
	final := filepath.Join(store, FolderName(number))
	if _, err := os.Lstat(final); !errors.Is(err, os.ErrNotExist) {
		return nil, errors.Join(fmt.Errorf("volume %d: %s exists already", number, final), err)
	}
	aside := filepath.Join(store, "."+FolderName(number)+".new")
	// What an interrupted creation left behind holds nothing: entries are written only after the rename.
	if err := os.RemoveAll(aside); err != nil {
		return nil, err
	}
	if err := fillFolder(o.Files, aside, who); err != nil {
		return nil, errors.Join(disk.Classify(err), os.RemoveAll(aside))
	}
	if err := o.Files.Rename(aside, final); err != nil {
		return nil, errors.Join(disk.Classify(err), os.RemoveAll(aside))
	}
	if err := o.Files.SyncFolder(store); err != nil {
		return nil, err
	}
	return OpenForWriting(final, options)
}

func fillFolder(files disk.FileSystem, folder string, who identity) error {
	if err := os.Mkdir(folder, 0o750); err != nil {
		return err
	}
	err := pagefile.Create(filepath.Join(folder, samplesName), func(tx *bbolt.Tx) error {
		return fillFile(tx, who, nil, bucketSamples)
	})
	if err != nil {
		return err
	}
	err = pagefile.Create(filepath.Join(folder, recordsName), func(tx *bbolt.Tx) error {
		return fillFile(tx, who, &state{}, bucketRecords, bucketTerms, bucketCounters, bucketObjects)
	})
	if err != nil {
		return err
	}
	return files.SyncFolder(folder)
}

// fillFile gives a new file its identity and empty buckets. Revision 0 stands for none: identity and first state are the layout's own.
func fillFile(tx *bbolt.Tx, who identity, first *state, buckets ...string) error {
	meta, err := tx.CreateBucket([]byte(bucketMeta))
	if err != nil {
		return err
	}
	if err := putSealed(meta, bucketMeta, []byte(keyVolume), 0, who.encode()); err != nil {
		return err
	}
	if first != nil {
		if err := putSealed(meta, bucketMeta, []byte(keyState), 0, first.encode()); err != nil {
			return err
		}
	}
	for _, name := range buckets {
		if _, err := tx.CreateBucket([]byte(name)); err != nil {
			return err
		}
	}
	return nil
}

// Info is what is known of a volume without reading its entries.
type Info struct {
	Number        uint64
	ID            [16]byte
	Stage         Stage
	CreatedAt     time.Time
	Age           time.Duration // time open for writing, as the process measured it; of the last commit once it is not
	Records       uint64
	FirstSequence uint64 // 0 while there are no records
	LastSequence  uint64
	FirstTested   time.Time // earliest, not first to arrive
	LastTested    time.Time
	RecordsBytes  int64
	SamplesBytes  int64
	SamplesKept   bool // false after retention dropped them
}

// Info returns the figures of the last commit.
func (v *Volume) Info() Info {
	v.life.RLock()
	defer v.life.RUnlock()
	v.mu.Lock()
	defer v.mu.Unlock()
	info := Info{
		Number: v.identity.number, ID: v.identity.id, CreatedAt: v.identity.createdAt, Stage: v.stage,
		Age: v.age(), Records: v.state.records, RecordsBytes: v.records.Bytes(),
		FirstSequence: v.state.firstSequence, LastSequence: v.state.lastSequence,
	}
	if v.state.records > 0 {
		info.FirstTested = time.Unix(0, v.state.firstTested).UTC()
		info.LastTested = time.Unix(0, v.state.lastTested).UTC()
	}
	if v.samples != nil {
		info.SamplesBytes, info.SamplesKept = v.samples.Bytes(), true
	}
	return info
}

// age counts only while the volume is written; v.mu is held.
func (v *Volume) age() time.Duration {
	if v.stage != Open {
		return v.state.age
	}
	return v.state.age + max(0, v.options.Clock().Sub(v.openedAt))
}

// Folder returns where the volume is.
func (v *Volume) Folder() string { return v.folder }

// NextSequence returns the lowest sequence that was never used here, not even by samples whose record was not committed.
func (v *Volume) NextSequence() uint64 {
	v.mu.Lock()
	defer v.mu.Unlock()
	return max(v.state.lastSequence, v.samplesLast) + 1
}

// OldestRead returns how long the longest read transaction that is still open has lasted. Volumes that are no longer written have none.
func (v *Volume) OldestRead() time.Duration {
	v.life.RLock()
	defer v.life.RUnlock()
	var oldest time.Duration
	for _, side := range []viewer{v.records, v.samples} {
		if file, ok := side.(*pagefile.File); ok {
			oldest = max(oldest, file.OldestRead())
		}
	}
	return oldest
}

// located names the volume in a damage.
func (v *Volume) located(err error) error { return damage.Locate(err, v.identity.number, "") }
