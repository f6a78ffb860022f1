package catalogue

import (
	"bytes"
	"crypto/rand"
	"encoding/binary"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// FileName is the catalogue's name in the store's folder.
const FileName = "catalogue.db"

const (
	bucketMeta         = "meta"
	bucketPartTypes    = "part-types"
	bucketCalibrations = "calibrations"
	bucketStations     = "stations"
	bucketManifest     = "manifest"
	bucketCursors      = "cursors"

	keyStore = "store"

	maxName = 256
)

var (
	// ErrDifferentContent says that a part type or calibration of this name exists with other content. It stays as it was.
	ErrDifferentContent = errors.New("exists with different content")
	// ErrNotFound says that the catalogue does not hold what was asked for.
	ErrNotFound = errors.New("not in the catalogue")
	// ErrName says that a name cannot be a key: it is empty, too long, or holds a zero byte.
	ErrName = errors.New("not a usable name")
)

// Options of a catalogue.
type Options struct {
	// Revision of the software, stored with everything it writes.
	Revision string
	// Clock dates the store and measures the age of reads. Default time.Now.
	Clock func() time.Time
	// Files is the file system for the rename at creation. Default disk.OS().
	Files disk.FileSystem
	// OpenFile replaces os.OpenFile in bbolt, for tests that make the file fail.
	OpenFile func(name string, flag int, perm os.FileMode) (*os.File, error)
}

func (o Options) withDefaults() Options {
	if o.Clock == nil {
		o.Clock = time.Now
	}
	if o.Files == nil {
		o.Files = disk.OS()
	}
	return o
}

// Catalogue is an open catalogue. All methods may be called by many goroutines.
type Catalogue struct {
	file    *pagefile.File
	options Options
	storeID [16]byte

	writing  sync.Mutex // held during an update
	revision uint64     // number of options.Revision, 0 before the first update; guarded by writing
}

// Create makes an empty catalogue in the store's folder and opens it. It appears whole or not at all.
func Create(store string, options Options) (*Catalogue, error) {
	o := options.withDefaults()
	path := filepath.Join(store, FileName)
	if _, err := os.Lstat(path); !errors.Is(err, os.ErrNotExist) {
		return nil, errors.Join(fmt.Errorf("%s exists already", path), err)
	}
	var id [16]byte
	if _, err := rand.Read(id[:]); err != nil {
		return nil, err
	}
	aside := filepath.Join(store, "."+FileName+".new")
	if err := os.RemoveAll(aside); err != nil {
		return nil, err
	}
	err := pagefile.Create(aside, func(tx *bbolt.Tx) error {
		for _, name := range []string{bucketMeta, bucketPartTypes, bucketCalibrations, bucketStations, bucketManifest, bucketCursors} {
			if _, err := tx.CreateBucket([]byte(name)); err != nil {
				return err
			}
		}
		content := binary.BigEndian.AppendUint64(id[:], uint64(o.Clock().UnixNano()))
		return tx.Bucket([]byte(bucketMeta)).Put([]byte(keyStore), envelope.Seal(bucketMeta, []byte(keyStore), 0, content))
	})
	if err == nil {
		err = o.Files.Rename(aside, path)
	}
	if err != nil {
		return nil, errors.Join(disk.Classify(err), os.RemoveAll(aside))
	}
	if err := o.Files.SyncFolder(store); err != nil {
		return nil, err
	}
	return Open(store, options)
}

// Open checks and opens the catalogue of a store. What is wrong with it is a *damage.Error; a missing one matches os.ErrNotExist and is never
// made anew.
func Open(store string, options Options) (*Catalogue, error) {
	o := options.withDefaults()
	file, err := pagefile.Open(filepath.Join(store, FileName), pagefile.Options{Clock: o.Clock, OpenFile: o.OpenFile})
	if err != nil {
		return nil, err
	}
	c := &Catalogue{file: file, options: o}
	content, err := c.get(bucketMeta, []byte(keyStore))
	if err == nil && len(content) != len(c.storeID)+8 {
		err = &damage.Error{File: file.Path(), Bucket: bucketMeta, Key: []byte(keyStore), Problem: "store id"}
	}
	if err != nil {
		return nil, errors.Join(err, file.Close())
	}
	copy(c.storeID[:], content)
	return c, nil
}

// StoreID returns the random id that ties the store's files together.
func (c *Catalogue) StoreID() [16]byte { return c.storeID }

// Path returns where the file is.
func (c *Catalogue) Path() string { return c.file.Path() }

// OldestRead returns how long the longest read transaction that is still open has lasted.
func (c *Catalogue) OldestRead() time.Duration { return c.file.OldestRead() }

// Bytes returns how much of the file is in use.
func (c *Catalogue) Bytes() int64 { return c.file.Bytes() }

// Close releases the file.
func (c *Catalogue) Close() error { return c.file.Close() }

// get returns the content under a key, or ErrNotFound.
func (c *Catalogue) get(bucket string, key []byte) (content []byte, err error) {
	err = c.file.View(func(r *tree.Reader) error {
		value, found, err := pagefile.Get(r, bucket, key)
		if err == nil && !found {
			err = fmt.Errorf("%s %q: %w", bucket, key, ErrNotFound)
		}
		content = value.Content
		return err
	})
	return content, err
}

// each visits the entries of a bucket behind the key after, until visit says stop.
func (c *Catalogue) each(bucket string, after []byte, visit func(key, content []byte) (more bool, err error)) error {
	return c.file.View(func(r *tree.Reader) error {
		from := append(bytes.Clone(after), 0)
		all := func([]byte) bool { return true }
		return pagefile.Walk(r, bucket, from, pagefile.Ascending, all, func(key, stored []byte) (bool, error) {
			value, err := envelope.Open(bucket, key, stored)
			if err != nil {
				return false, err
			}
			return visit(key, value.Content)
		})
	})
}

// update runs change in a transaction.
func (c *Catalogue) update(change func(tx *bbolt.Tx, revision uint64) error) error {
	c.writing.Lock()
	defer c.writing.Unlock()
	revision := c.revision
	err := c.file.Update(func(tx *bbolt.Tx) (err error) {
		if revision == 0 {
			if revision, err = pagefile.Intern(tx, c.options.Revision); err != nil {
				return err
			}
		}
		return change(tx, revision)
	})
	if err == nil {
		c.revision = revision
	}
	return err
}

// put stores content under a key, whatever was there.
func (c *Catalogue) put(bucket string, key, content []byte) error {
	return c.update(func(tx *bbolt.Tx, revision uint64) error {
		return tx.Bucket([]byte(bucket)).Put(key, envelope.Seal(bucket, key, revision, content))
	})
}

// putOnce stores content under a key that is free, or holds the same content.
func (c *Catalogue) putOnce(bucket string, key, content []byte) error {
	switch before, err := c.get(bucket, key); {
	case errors.Is(err, ErrNotFound):
	case err != nil:
		return err
	default:
		return same(bucket, key, before, content)
	}
	return c.update(func(tx *bbolt.Tx, revision uint64) error {
		b := tx.Bucket([]byte(bucket))
		// Another caller may have come first since the look above.
		if stored := b.Get(key); stored != nil {
			value, err := envelope.Open(bucket, key, stored)
			if err != nil {
				return err
			}
			return same(bucket, key, value.Content, content)
		}
		return b.Put(key, envelope.Seal(bucket, key, revision, content))
	})
}

func same(bucket string, key, before, content []byte) error {
	if bytes.Equal(before, content) {
		return nil
	}
	return fmt.Errorf("%s %q: %w", bucket, key, ErrDifferentContent)
}

func checkName(name string) error {
	if name == "" || len(name) > maxName || strings.IndexByte(name, 0) >= 0 {
		return fmt.Errorf("%q: %w (1 to %d bytes, none of them zero)", name, ErrName, maxName)
	}
	return nil
}

// Verify reads every value and returns what is damaged.
func (c *Catalogue) Verify() []error {
	var findings []error
	for _, bucket := range []string{
		bucketMeta, bucketPartTypes, bucketCalibrations, bucketStations, bucketManifest, bucketCursors, pagefile.Revisions,
	} {
		all := func([]byte) bool { return true }
		err := c.file.View(func(r *tree.Reader) error {
			if _, found, err := r.Bucket(bucket); err != nil || !found && bucket == pagefile.Revisions {
				return err // that one appears with the first update
			}
			return pagefile.Walk(r, bucket, []byte{0}, pagefile.Ascending, all, func(key, stored []byte) (bool, error) {
				if _, err := envelope.Open(bucket, key, stored); err != nil {
					findings = append(findings, damage.Locate(err, 0, c.file.Path()))
				}
				return true, nil
			})
		})
		if err != nil {
			findings = append(findings, err)
		}
	}
	return findings
}
