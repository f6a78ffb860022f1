package volume

import (
	"bytes"
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/tree"
)

const mutilated = 40 // entries in a volume that gets mutilated

// opened returns the folder of a volume that was being written, with entries 1..mutilated, all files closed.
func opened(t testing.TB) string {
	t.Helper()
	v, err := Create(t.TempDir(), 7, testOptions)
	if err != nil {
		t.Fatal(err)
	}
	fill(t, v, 1, mutilated)
	if err := v.Close(); err != nil {
		t.Fatal(err)
	}
	return v.Folder()
}

type mutilation struct {
	name   string
	change func(content []byte) []byte
	// steps says that the file may look as if its last commit had not happened: that is for the mark outside the volume to notice.
	steps bool
}

func mutilations(random *rand.Rand, size int) []mutilation {
	list := []mutilation{
		{"empty", func(b []byte) []byte { return nil }, false},
		{"one byte", func(b []byte) []byte { return b[:1] }, false},
		{"first meta zeroed", func(b []byte) []byte { clear(b[:tree.PageSize]); return b }, true},
		{"second meta zeroed", func(b []byte) []byte { clear(b[tree.PageSize : 2*tree.PageSize]); return b }, true},
		{"both metas zeroed", func(b []byte) []byte { clear(b[:2*tree.PageSize]); return b }, false},
		{"garbage", func(b []byte) []byte { rand.NewChaCha8([32]byte{1}).Read(b); return b }, false},
		{"zeros", func(b []byte) []byte { clear(b); return b }, false},
		{"meta claims a huge file", func(b []byte) []byte { return forgeMeta(b, 40, 1<<40) }, false},
		{"meta claims a root beyond the end", func(b []byte) []byte { return forgeMeta(b, 16, 1<<40) }, false},
		{"meta claims another page size", func(b []byte) []byte { return forgeMeta(b, 8, 8192) }, false},
		{"root page leads to itself", loopRoot, false},
	}
	cuts := 20
	if testing.Short() {
		cuts = 5
	}
	for i := range cuts {
		at := size * (i + 1) / (cuts + 1)
		list = append(list, mutilation{fmt.Sprintf("cut at %d", at), func(b []byte) []byte { return b[:at] }, false})
	}
	for range 5 {
		one, other := 2+random.IntN(size/tree.PageSize-2), 2+random.IntN(size/tree.PageSize-2)
		list = append(list, mutilation{fmt.Sprintf("pages %d and %d swapped", one, other), func(b []byte) []byte {
			kept := bytes.Clone(b[one*tree.PageSize : (one+1)*tree.PageSize])
			copy(b[one*tree.PageSize:(one+1)*tree.PageSize], b[other*tree.PageSize:])
			copy(b[other*tree.PageSize:], kept)
			return b
		}, false})
	}
	return list
}

// forgeMeta sets a field of both meta pages and makes their checksums fit: what a flip never does, but a bad program might.
func forgeMeta(b []byte, field int, value uint64) []byte {
	for slot := range 2 {
		meta := b[slot*tree.PageSize+16:]
		binary.LittleEndian.PutUint64(meta[field:], value)
		hash := uint64(14695981039346656037) // FNV-64a, written out so that the judge does not share the product's code
		for _, c := range meta[:56] {
			hash = (hash ^ uint64(c)) * 1099511628211
		}
		binary.LittleEndian.PutUint64(meta[56:], hash)
	}
	return b
}

// loopRoot turns the root page of the newest commit into a branch whose only child is itself: bbolt recurses on it until the stack ends.
func loopRoot(b []byte) []byte {
	meta, err := tree.ReadMeta(bytes.NewReader(b), int64(len(b)))
	if err != nil {
		return b
	}
	page := b[meta.Root*tree.PageSize : (meta.Root+1)*tree.PageSize]
	clear(page[8:])
	order := binary.LittleEndian
	order.PutUint16(page[8:], 1)   // branch
	order.PutUint16(page[10:], 1)  // one element
	order.PutUint32(page[16:], 16) // its key follows the table
	order.PutUint32(page[20:], 1)
	order.PutUint64(page[24:], meta.Root)
	page[32] = 'a'
	return b
}

// TestMutilations damages each file of an open, a retired and a closed volume in every listed way: the volume is refused or every answer is
// right or an error that says where; the damaged file is not touched.
func TestMutilations(t *testing.T) {
	t.Parallel()
	random := rand.New(rand.NewPCG(1, 1))
	want := ledgerOf(mutilated)
	for _, c := range []struct {
		stage  string
		folder string
		open   func(string, Options) (*Volume, error)
	}{
		{"open", opened(t), OpenForWriting},
		{"retired", opened(t), OpenForReading},
		{"closed", closed(t, mutilated), OpenForReading},
	} {
		for _, name := range []string{recordsName, samplesName} {
			path := filepath.Join(c.folder, name)
			sound, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			for _, m := range mutilations(random, len(sound)) {
				what := fmt.Sprintf("%s, %s, %s", c.stage, name, m.name)
				broken := m.change(bytes.Clone(sound))
				writeFile(t, path, broken)
				v, err := c.open(c.folder, testOptions)
				switch {
				case err == nil:
					steps := m.steps && c.stage != "closed" && name == recordsName
					standing(t, v, want, steps, what).readAll(v).holds(t, what)
					if err := v.Close(); err != nil {
						t.Errorf("%s: close: %v", what, err)
					}
					if bytes.Equal(broken, sound) || c.stage != "closed" {
						break
					}
					if report := verifyFolder(t, c.folder); report.Err() == nil {
						t.Errorf("%s: verify found nothing", what)
					}
				case !errors.Is(err, damage.ErrDamaged):
					t.Errorf("%s: %v", what, err)
				}
				if after, err := os.ReadFile(path); err != nil || !bytes.Equal(after, broken) {
					t.Errorf("%s: the damaged file was changed (%v)", what, err)
				}
			}
			writeFile(t, path, sound)
		}
	}
}

// standing returns what a volume should hold: everything, or everything up to the commit before the last, if it may have stepped back.
func standing(t *testing.T, v *Volume, all ledger, steps bool, what string) ledger {
	t.Helper()
	records := v.Info().Records
	if !steps || records == mutilated {
		return all
	}
	if records < mutilated-17 { // the longest commit of fill
		t.Errorf("%s: stepped back to %d of %d records", what, records, mutilated)
	}
	return ledgerOf(records)
}

func writeFile(t *testing.T, path string, content []byte) {
	t.Helper()
	if err := os.WriteFile(path, content, 0o600); err != nil {
		t.Fatal(err)
	}
}

func verifyFolder(t *testing.T, folder string) Report {
	t.Helper()
	v, err := OpenForReading(folder, testOptions)
	if err != nil {
		return Report{Findings: []error{err}}
	}
	defer v.Close()
	report, err := v.Verify(context.Background())
	if err != nil {
		t.Errorf("verify: %v", err)
	}
	return report
}

func TestMissingFiles(t *testing.T) {
	t.Parallel()
	for _, name := range []string{recordsName, samplesName} {
		folder := opened(t)
		if err := os.Remove(filepath.Join(folder, name)); err != nil {
			t.Fatal(err)
		}
		for _, open := range []func(string, Options) (*Volume, error){OpenForWriting, OpenForReading} {
			if _, err := open(folder, testOptions); !errors.Is(err, damage.ErrDamaged) || !errors.Is(err, os.ErrNotExist) {
				t.Errorf("%s missing: %v", name, err)
			}
		}
		if _, err := os.Stat(filepath.Join(folder, name)); !errors.Is(err, os.ErrNotExist) {
			t.Errorf("%s was made anew", name)
		}
	}
}

// TestBitFlips flips single bits anywhere in a file. In a closed volume every flip is found by Verify, and reading is right or says where. In
// an open volume reading is right or says where, nothing is absent (but for the last commit, when the flip hits a meta page), and a flip
// inside a value is found by Verify.
func TestBitFlips(t *testing.T) {
	t.Parallel()
	flips := 1000
	if testing.Short() {
		flips = 100
	}
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	random := rand.New(rand.NewPCG(seed, 0))
	want := ledgerOf(mutilated)
	shut, unshut := closed(t, mutilated), opened(t)
	var noticed, unnoticed int
	for i := range flips {
		name := []string{recordsName, recordsName, samplesName, sumsName, filterName}[i%5]
		flip(t, random, filepath.Join(shut, name), 0, func(what string) {
			if report := verifyFolder(t, shut); report.Err() == nil {
				t.Errorf("closed: %s: verify found nothing", what)
			}
			v, err := OpenForReading(shut, testOptions)
			if err == nil {
				want.readAll(v).holds(t, "closed: "+what)
				err = v.Close()
			}
			if err != nil && !errors.Is(err, damage.ErrDamaged) {
				t.Errorf("closed: %s: %v", what, err)
			}
		})
		if i%5 > 2 {
			continue
		}
		path := filepath.Join(unshut, name)
		flip(t, random, path, usedBytes(t, path), func(what string) {
			v, err := OpenForWriting(unshut, testOptions)
			if err == nil {
				steps := false
				if meta, metaErr := readMeta(path); metaErr == nil {
					steps = meta.Single && name == recordsName
				}
				o := standing(t, v, want, steps, "open: "+what).readAll(v)
				o.holds(t, "open: "+what)
				report, verifyErr := v.Verify(context.Background())
				if verifyErr != nil || o.damaged > 0 && report.Err() == nil {
					t.Errorf("open: %s: reading met damage, verify did not (%v)", what, verifyErr)
				}
				if o.damaged == 0 {
					unnoticed++
				} else {
					noticed++
				}
				err = v.Close()
			} else {
				noticed++
			}
			if err != nil && !errors.Is(err, damage.ErrDamaged) {
				t.Errorf("open: %s: %v", what, err)
			}
		})
	}
	t.Logf("open volume: %d flips noticed, %d harmless", noticed, unnoticed)
	if noticed == 0 {
		t.Error("no flip hit anything: the test proves nothing")
	}
}

// flip changes one bit of the first size bytes of a file (0: of all), runs then, and puts it back.
func flip(t *testing.T, random *rand.Rand, path string, size int64, then func(what string)) {
	t.Helper()
	file, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	if size == 0 {
		info, err := file.Stat()
		if err != nil {
			t.Fatal(err)
		}
		size = info.Size()
	}
	at, bit := random.Int64N(size), byte(1)<<random.IntN(8)
	sound := make([]byte, 1)
	if _, err := file.ReadAt(sound, at); err != nil {
		t.Fatal(err)
	}
	if _, err := file.WriteAt([]byte{sound[0] ^ bit}, at); err != nil {
		t.Fatal(err)
	}
	then(fmt.Sprintf("%s, byte %d, bit %#x", filepath.Base(path), at, bit))
	if _, err := file.WriteAt(sound, at); err != nil {
		t.Fatal(err)
	}
}

func readMeta(path string) (tree.Meta, error) {
	file, err := os.Open(path)
	if err != nil {
		return tree.Meta{}, err
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		return tree.Meta{}, err
	}
	return tree.ReadMeta(file, info.Size())
}

func usedBytes(t *testing.T, path string) int64 {
	t.Helper()
	meta, err := readMeta(path)
	if err != nil {
		t.Fatal(err)
	}
	return meta.Bytes()
}
