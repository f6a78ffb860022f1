package volume

import (
	"context"
	"encoding/binary"
	"errors"
	"os"
	"path/filepath"
	"sync"
	"testing"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/disktest"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/pagefile"
)

// TestSealFails makes every call of Seal that changes the disk fail in turn. Whatever happened, the volume answers as before, opens again,
// and a second try closes it.
func TestSealFails(t *testing.T) {
	t.Parallel()
	want := ledgerOf(mutilated)
	for failAt := 0; ; failAt++ {
		folder := opened(t)
		faulty := &disktest.Faulty{Files: disk.OS(), FailAt: failAt}
		options := testOptions
		options.Files = faulty
		v, err := OpenForReading(folder, options)
		if err != nil {
			t.Fatal(err)
		}
		sealErr := v.Seal(context.Background(), []byte("id"))
		want.readAll(v).holds(t, "after a failed seal")
		if err := v.Close(); err != nil {
			t.Fatal(err)
		}
		again, err := OpenForReading(folder, testOptions)
		if err != nil {
			t.Fatalf("call %d failed: %v", failAt, err)
		}
		want.readAll(again).holds(t, "opened after a failed seal")
		if err := again.Seal(context.Background(), []byte("id")); err != nil || again.Info().Stage != Closed {
			t.Errorf("second try after call %d failed: %v", failAt, err)
		}
		if report, err := again.Verify(context.Background()); err != nil || report.Err() != nil {
			t.Errorf("verify after call %d failed: %v, %v", failAt, err, report.Err())
		}
		if err := again.Close(); err != nil {
			t.Fatal(err)
		}
		if faulty.Calls() <= failAt {
			if sealErr != nil {
				t.Errorf("no call failed, yet: %v", sealErr)
			}
			if failAt < 8 {
				t.Errorf("only %d calls were tried", failAt)
			}
			return
		}
		if !errors.Is(sealErr, disktest.ErrInjected) {
			t.Errorf("call %d failed, seal said %v", failAt, sealErr)
		}
	}
}

// TestCreateFails makes the rename and the syncs of a creation fail: there is a whole volume or none, and a second try succeeds.
func TestCreateFails(t *testing.T) {
	t.Parallel()
	for failAt := range 3 {
		store := t.TempDir()
		options := testOptions
		options.Files = &disktest.Faulty{Files: disk.OS(), FailAt: failAt}
		if _, err := Create(store, 1, options); !errors.Is(err, disktest.ErrInjected) {
			t.Errorf("call %d failed, create said %v", failAt, err)
		}
		folder := filepath.Join(store, FolderName(1))
		var v *Volume
		var err error
		if _, statErr := os.Stat(folder); statErr == nil {
			v, err = OpenForWriting(folder, testOptions)
		} else {
			v, err = Create(store, 1, testOptions)
		}
		if err != nil {
			t.Fatalf("after call %d failed: %v", failAt, err)
		}
		fill(t, v, 1, 3)
		if err := v.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

// breakable opens files so that a test can make one fail, by closing its descriptor under bbolt.
type breakable struct {
	mu    sync.Mutex
	files map[string]*os.File
}

func (b *breakable) open(name string, flag int, perm os.FileMode) (*os.File, error) {
	file, err := os.OpenFile(name, flag, perm)
	b.mu.Lock()
	defer b.mu.Unlock()
	if b.files == nil {
		b.files = make(map[string]*os.File)
	}
	b.files[filepath.Base(name)] = file
	return file, err
}

// TestFailedCommit breaks one file under bbolt: the append fails, nothing more is taken, and after Reopen everything that was acknowledged is
// there, once.
func TestFailedCommit(t *testing.T) {
	t.Parallel()
	for _, name := range []string{recordsName, samplesName} {
		var files breakable
		options := testOptions
		options.OpenFile = files.open
		v := create(t, options)
		fill(t, v, 1, 30)
		if err := files.files[name].Close(); err != nil {
			t.Fatal(err)
		}
		for range 2 {
			if err := v.Append([]*Entry{entry(v.NextSequence() + 1)}); !errors.Is(err, pagefile.ErrFailed) {
				t.Errorf("%s broken: %v", name, err)
			}
		}
		ledgerOf(30).readAll(v).holds(t, name+" broken")
		if err := v.Reopen(); err != nil {
			t.Fatal(err)
		}
		if got := v.Info().Records; got != 30 {
			t.Errorf("%s: %d records after reopening", name, got)
		}
		next := v.NextSequence()
		if err := v.Append([]*Entry{entry(next)}); err != nil {
			t.Errorf("%s: append after reopening: %v", name, err)
		}
		report, err := v.Verify(context.Background())
		if err != nil || report.Err() != nil || report.Records != 31 {
			t.Errorf("%s: verify after reopening: %v, %+v", name, err, report)
		}
	}
}

// TestNewerSchemaIsRefused stores a record as a later program would: it is neither read nor called damaged.
func TestNewerSchemaIsRefused(t *testing.T) {
	t.Parallel()
	folder := opened(t)
	tamper(t, filepath.Join(folder, recordsName), bucketRecords, func(b *bbolt.Bucket) error {
		key := recordKey(2)
		value := append([]byte{0, 0, 0, 0, envelope.Schema + 1, 1}, "who knows"...)
		sum := crc(append(append([]byte(bucketRecords), append([]byte{0}, key...)...), value[4:]...))
		binary.BigEndian.PutUint32(value, sum)
		return b.Put(key, value)
	})
	v, err := OpenForReading(folder, testOptions)
	if err != nil {
		t.Fatal(err)
	}
	defer v.Close()
	if _, err := v.Record(2); !errors.Is(err, envelope.ErrNewerSchema) || errors.Is(err, damage.ErrDamaged) {
		t.Errorf("record of a newer schema: %v", err)
	}
	if _, err := v.Record(3); err != nil {
		t.Errorf("its neighbour: %v", err)
	}
}
