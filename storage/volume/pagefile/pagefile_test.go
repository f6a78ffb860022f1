package pagefile

import (
	"errors"
	"os"
	"path/filepath"
	"testing"
	"time"

	"go.etcd.io/bbolt"
	"go.uber.org/goleak"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/tree"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

func make1(t *testing.T, options Options) *File {
	t.Helper()
	path := filepath.Join(t.TempDir(), "file.db")
	err := Create(path, func(tx *bbolt.Tx) error {
		_, err := tx.CreateBucket([]byte("b"))
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	f, err := Open(path, options)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = f.Close() })
	return f
}

func put(key, value string) func(tx *bbolt.Tx) error {
	return func(tx *bbolt.Tx) error { return tx.Bucket([]byte("b")).Put([]byte(key), []byte(value)) }
}

func get(t *testing.T, view func(func(*tree.Reader) error) error, key string) string {
	t.Helper()
	var value []byte
	err := view(func(r *tree.Reader) error {
		b, found, err := r.Bucket("b")
		if err != nil || !found {
			return errors.Join(err, errors.New("no bucket"))
		}
		value, err = b.Get([]byte(key))
		return err
	})
	if err != nil {
		t.Error(err)
	}
	return string(value)
}

// TestPanicInChange stands for bbolt meeting a damaged page while it writes: the file is out of use, the process is not, reading goes on, and
// closing does not hang.
func TestPanicInChange(t *testing.T) {
	f := make1(t, Options{})
	if err := f.Update(put("k", "before")); err != nil {
		t.Fatal(err)
	}
	err := f.Update(func(tx *bbolt.Tx) error {
		if err := put("k", "after")(tx); err != nil {
			return err
		}
		panic("assertion failed: page 7")
	})
	if !errors.Is(err, ErrFailed) || !errors.Is(err, damage.ErrDamaged) {
		t.Errorf("update: %v", err)
	}
	if err := f.Update(put("k", "later")); !errors.Is(err, ErrFailed) {
		t.Errorf("next update: %v", err)
	}
	if got := get(t, f.View, "k"); got != "before" {
		t.Errorf("k is %q", got)
	}
	closed := make(chan error, 1)
	go func() { closed <- f.Close() }()
	select {
	case err := <-closed:
		if err != nil {
			t.Errorf("close: %v", err)
		}
	case <-time.After(5 * time.Second):
		t.Fatal("close hangs")
	}
}

func TestErrorOfChangeWritesNothing(t *testing.T) {
	f := make1(t, Options{})
	mine := errors.New("mine")
	err := f.Update(func(tx *bbolt.Tx) error { return errors.Join(put("k", "v")(tx), mine) })
	if !errors.Is(err, mine) || errors.Is(err, ErrFailed) {
		t.Errorf("update: %v", err)
	}
	if got := get(t, f.View, "k"); got != "" {
		t.Errorf("k is %q", got)
	}
	if err := f.Update(put("k", "v")); err != nil {
		t.Errorf("next update: %v", err)
	}
}

// TestFreeze ends writing, and cuts the file to what is in use.
func TestFreeze(t *testing.T) {
	f := make1(t, Options{GrowBytes: 1 << 20})
	if err := f.Update(put("k", string(make([]byte, 100_000)))); err != nil {
		t.Fatal(err)
	}
	reserved := size(t, f.Path())
	still, err := f.Freeze()
	if err != nil {
		t.Fatal(err)
	}
	if got := size(t, f.Path()); got != still.Bytes() || got >= reserved {
		t.Errorf("%d bytes, in use are %d, reserved were %d", got, still.Bytes(), reserved)
	}
	if got := get(t, still.View, "k"); len(got) != 100_000 {
		t.Errorf("k has %d bytes", len(got))
	}
	if err := f.Update(put("k", "v")); err == nil {
		t.Error("a frozen file took an update")
	}
	if err := f.View(func(*tree.Reader) error { return nil }); !errors.Is(err, ErrClosed) {
		t.Errorf("view of the closed file: %v", err)
	}
	if _, err := Check(f.Path()); err != nil {
		t.Errorf("check: %v", err)
	}
}

func size(t *testing.T, path string) int64 {
	t.Helper()
	info, err := os.Stat(path)
	if err != nil {
		t.Fatal(err)
	}
	return info.Size()
}

// TestRevisions gives numbers to texts, in this file for good.
func TestRevisions(t *testing.T) {
	f := make1(t, Options{})
	want := map[string]uint64{"one": 1, "two": 2, "one ": 3}
	for range 2 {
		for _, text := range []string{"one", "two", "one "} {
			var number uint64
			err := f.Update(func(tx *bbolt.Tx) (err error) {
				number, err = Intern(tx, text)
				return err
			})
			if err != nil || number != want[text] {
				t.Errorf("%q has number %d, want %d (%v)", text, number, want[text], err)
			}
		}
	}
	err := f.View(func(r *tree.Reader) error {
		if text, err := Revision(r, 2); err != nil || text != "two" {
			t.Errorf("2 is %q, %v", text, err)
		}
		if _, err := Revision(r, 4); !errors.Is(err, damage.ErrDamaged) {
			t.Errorf("4: %v", err)
		}
		return nil
	})
	if err != nil {
		t.Error(err)
	}
}

func TestOpenCreatesNothing(t *testing.T) {
	path := filepath.Join(t.TempDir(), "none.db")
	if _, err := Open(path, Options{}); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("open: %v", err)
	}
	if _, err := os.Stat(path); !errors.Is(err, os.ErrNotExist) {
		t.Error("the file was created")
	}
}
