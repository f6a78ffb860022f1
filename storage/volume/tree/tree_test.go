package tree_test

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"testing"
	"time"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/tree"
)

// build makes a bbolt file with buckets of several shapes, in many commits, so that there are free pages, overflow pages and three levels.
func build(t *testing.T) (content []byte, db *bbolt.DB) {
	t.Helper()
	path := filepath.Join(t.TempDir(), "file.db")
	db, err := bbolt.Open(path, 0o600, &bbolt.Options{PageSize: tree.PageSize, NoSync: true, NoGrowSync: true, Timeout: time.Second})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = db.Close() })
	random := rand.New(rand.NewPCG(5, 6))
	for round := range 30 {
		err := db.Update(func(tx *bbolt.Tx) error {
			for _, name := range []string{"empty", "inline", "small", "wide", "large"} {
				if _, err := tx.CreateBucketIfNotExists([]byte(name)); err != nil {
					return err
				}
			}
			if err := tx.Bucket([]byte("inline")).Put([]byte{'k', byte(round % 3)}, []byte("value")); err != nil {
				return err
			}
			if err := tx.Bucket([]byte("small")).Put(fmt.Appendf(nil, "k%02d", round), bytes.Repeat([]byte("s"), 90)); err != nil {
				return err
			}
			for range 1000 {
				key := fmt.Appendf(nil, "a rather long key to get many branch pages, %x", random.Uint64())
				if err := tx.Bucket([]byte("wide")).Put(key, key[:random.IntN(40)]); err != nil {
					return err
				}
			}
			key := binary.BigEndian.AppendUint64(nil, uint64(round))
			return tx.Bucket([]byte("large")).Put(key, bytes.Repeat(key, 1+random.IntN(3000)))
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	if content, err = os.ReadFile(path); err != nil {
		t.Fatal(err)
	}
	return content, db
}

func reader(t *testing.T, content []byte) (*tree.Reader, tree.Meta) {
	t.Helper()
	meta, err := tree.ReadMeta(bytes.NewReader(content), int64(len(content)))
	if err != nil {
		t.Fatal(err)
	}
	return tree.NewReader(tree.FileSource{File: bytes.NewReader(content)}, meta.Root, meta.HighWater), meta
}

// TestAgainstBolt holds every answer against bbolt's own: all entries both ways, seeks to keys, beside keys and beyond the ends.
func TestAgainstBolt(t *testing.T) {
	content, db := build(t)
	r, meta := reader(t, content)
	if problems := tree.Check(bytes.NewReader(content), meta); len(problems) > 0 {
		t.Fatalf("a sound file has problems: %v", problems)
	}
	err := db.View(func(tx *bbolt.Tx) error {
		return tx.ForEach(func(name []byte, theirs *bbolt.Bucket) error {
			ours, found, err := r.Bucket(string(name))
			if err != nil || !found {
				t.Fatalf("bucket %s: %v, %v", name, found, err)
			}
			walkBoth(t, string(name), theirs, ours)
			seekBoth(t, string(name), theirs, ours)
			return nil
		})
	})
	if err != nil {
		t.Fatal(err)
	}
	if _, found, err := r.Bucket("none"); found || err != nil {
		t.Errorf("a bucket that is not there: %v, %v", found, err)
	}
}

func walkBoth(t *testing.T, name string, theirs *bbolt.Bucket, ours *tree.Bucket) {
	t.Helper()
	ourCursor, theirCursor := ours.Cursor(), theirs.Cursor()
	steps := 0
	k, v := theirCursor.First()
	ok, ov, err := ourCursor.First()
	for ; k != nil; steps++ {
		if err != nil || !bytes.Equal(k, ok) || !bytes.Equal(v, ov) {
			t.Fatalf("%s: step %d forward: %q, want %q (%v)", name, steps, ok, k, err)
		}
		k, v = theirCursor.Next()
		ok, ov, err = ourCursor.Next()
	}
	if ok != nil || err != nil {
		t.Fatalf("%s: %q behind the last (%v)", name, ok, err)
	}
	k, v = theirCursor.Last()
	// From beyond the end, one step back is the last entry.
	if ok, ov, err = ourCursor.Prev(); len(k) == 0 {
		ok, err = nil, nil
	}
	for ; k != nil; steps-- {
		if err != nil || !bytes.Equal(k, ok) || !bytes.Equal(v, ov) {
			t.Fatalf("%s: step %d back: %q, want %q (%v)", name, steps, ok, k, err)
		}
		k, v = theirCursor.Prev()
		ok, ov, err = ourCursor.Prev()
	}
	if ok != nil || err != nil || steps != 0 {
		t.Fatalf("%s: %q before the first (%v)", name, ok, err)
	}
}

func seekBoth(t *testing.T, name string, theirs *bbolt.Bucket, ours *tree.Bucket) {
	t.Helper()
	random := rand.New(rand.NewPCG(7, 8))
	keys := [][]byte{{0}, []byte("a"), []byte("a rather long key to get many branch pages, "), {0xff, 0xff}}
	_ = theirs.ForEach(func(k, _ []byte) error {
		if random.IntN(20) == 0 {
			keys = append(keys, bytes.Clone(k), append(bytes.Clone(k), 0), k[:len(k)-1])
		}
		return nil
	})
	for _, key := range keys {
		if len(key) == 0 {
			continue
		}
		k, v := theirs.Cursor().Seek(key)
		ok, ov, err := ours.Cursor().Seek(key)
		if err != nil || !bytes.Equal(k, ok) || !bytes.Equal(v, ov) {
			t.Fatalf("%s: seek %q: %q, want %q (%v)", name, key, ok, k, err)
		}
		got, err := ours.Get(key)
		if want := theirs.Get(key); err != nil || !bytes.Equal(got, want) || (got == nil) != (want == nil) {
			t.Fatalf("%s: get %q: %q, want %q (%v)", name, key, got, want, err)
		}
	}
}

// TestFlippedStructure flips bits in headers and element tables of tree pages, where bbolt has no check at all. Check must find every one, and
// a walk of all buckets must end, with an error or with every entry it should have.
func TestFlippedStructure(t *testing.T) {
	content, _ := build(t)
	r, meta := reader(t, content)
	want := count(t, r)
	random := rand.New(rand.NewPCG(9, 10))
	flips := 400
	if testing.Short() {
		flips = 60
	}
	for range flips {
		page := 2 + random.IntN(int(meta.HighWater)-2)
		kind := binary.LittleEndian.Uint16(content[page*tree.PageSize+8:])
		if binary.LittleEndian.Uint64(content[page*tree.PageSize:]) != uint64(page) || kind != 1 && kind != 2 {
			continue // an overflow page, or the free list
		}
		elements := int(binary.LittleEndian.Uint16(content[page*tree.PageSize+10:]))
		at := page*tree.PageSize + random.IntN(min(16+16*elements, tree.PageSize))
		bit := byte(1) << random.IntN(8)
		if !reaches(content, meta, uint64(page)) {
			continue // a free page with old content
		}
		content[at] ^= bit
		problems := tree.Check(bytes.NewReader(content), meta)
		got, err := countAll(tree.NewReader(tree.FileSource{File: bytes.NewReader(content)}, meta.Root, meta.HighWater))
		content[at] ^= bit
		if len(problems) == 0 && !(at%tree.PageSize >= 16 && onlySize(content, page, at)) {
			t.Errorf("page %d, byte %d, bit %#x: check found nothing", page, at%tree.PageSize, bit)
		}
		if err != nil && !errors.Is(err, damage.ErrDamaged) {
			t.Errorf("page %d, byte %d: %v", page, at%tree.PageSize, err)
		}
		if err == nil && got != want {
			t.Errorf("page %d, byte %d, bit %#x: %d entries, want %d, and no error", page, at%tree.PageSize, bit, got, want)
		}
	}
}

// onlySize says whether the byte belongs to the sizes of the last key and value of a leaf: structure cannot tell where those end, the envelope
// of the value can, which covers both.
func onlySize(content []byte, page, at int) bool {
	elements := int(binary.LittleEndian.Uint16(content[page*tree.PageSize+10:]))
	last := page*tree.PageSize + 16 + 16*(elements-1)
	return binary.LittleEndian.Uint16(content[page*tree.PageSize+8:]) == 2 && at >= last+8 && at < last+16
}

// reaches says whether a page is part of the tree, not merely old content of a free one.
func reaches(content []byte, meta tree.Meta, page uint64) bool {
	broken := bytes.Clone(content)
	clear(broken[page*tree.PageSize : (page+1)*tree.PageSize])
	return len(tree.Check(bytes.NewReader(broken), meta)) > 0
}

func count(t *testing.T, r *tree.Reader) int {
	t.Helper()
	n, err := countAll(r)
	if err != nil {
		t.Fatal(err)
	}
	return n
}

func countAll(r *tree.Reader) (int, error) {
	n := 0
	for _, name := range []string{"empty", "inline", "small", "wide", "large"} {
		bucket, found, err := r.Bucket(name)
		if err != nil {
			return n, err
		}
		if !found {
			return n, fmt.Errorf("bucket %s is gone", name)
		}
		cursor := bucket.Cursor()
		k, _, err := cursor.First()
		for ; k != nil && err == nil; k, _, err = cursor.Next() {
			n++
		}
		if err != nil {
			return n, err
		}
	}
	return n, nil
}

// TestFlippedBranchKey flips bits in the keys of branch pages, which send a search to the wrong leaf: what was there is found or damage is
// met, it is never silently absent.
func TestFlippedBranchKey(t *testing.T) {
	content, _ := build(t)
	r, meta := reader(t, content)
	wide, _, err := r.Bucket("wide")
	if err != nil {
		t.Fatal(err)
	}
	var keys [][]byte
	cursor := wide.Cursor()
	for k, _, err := cursor.First(); k != nil; k, _, err = cursor.Next() {
		if err != nil {
			t.Fatal(err)
		}
		keys = append(keys, k)
	}
	random := rand.New(rand.NewPCG(13, 14))
	flips, met := 40, 0
	if testing.Short() {
		flips = 10
	}
	for done := 0; done < flips; {
		page := 2 + random.IntN(int(meta.HighWater)-2)
		header := content[page*tree.PageSize:]
		if binary.LittleEndian.Uint64(header) != uint64(page) || binary.LittleEndian.Uint16(header[8:]) != 1 || !reaches(content, meta, uint64(page)) {
			continue
		}
		done++
		element := 16 + 16*random.IntN(int(binary.LittleEndian.Uint16(header[10:])))
		at := page*tree.PageSize + element + int(binary.LittleEndian.Uint32(header[element:])) +
			random.IntN(int(binary.LittleEndian.Uint32(header[element+4:])))
		key := content[page*tree.PageSize+element+int(binary.LittleEndian.Uint32(header[element:])):][:binary.LittleEndian.Uint32(header[element+4:])]
		near, _ := slices.BinarySearchFunc(keys, bytes.Clone(key), bytes.Compare)
		bit := byte(1) << random.IntN(8)
		content[at] ^= bit
		if len(tree.Check(bytes.NewReader(content), meta)) == 0 {
			t.Errorf("page %d, byte %d: check found nothing", page, at%tree.PageSize)
		}
		broken := tree.NewReader(tree.FileSource{File: bytes.NewReader(content)}, meta.Root, meta.HighWater)
		for _, key := range keys[max(0, near-150):min(len(keys), near+150)] {
			found, ok, err := broken.Bucket("wide")
			if err == nil && ok {
				var value []byte
				if value, err = found.Get(key); err == nil && value == nil {
					t.Errorf("page %d, byte %d, bit %#x: %q is absent", page, at%tree.PageSize, bit, key)
				}
			}
			if err != nil {
				met++
			}
		}
		content[at] ^= bit
	}
	if met == 0 {
		t.Error("no search met the damage: the test proves nothing")
	}
}

// TestFreelistOverlap puts a page that is in use on the free list: bbolt would overwrite it.
func TestFreelistOverlap(t *testing.T) {
	content, _ := build(t)
	_, meta := reader(t, content)
	list := content[meta.Freelist*tree.PageSize:]
	if binary.LittleEndian.Uint16(list[10:]) == 0 {
		t.Fatal("no free pages to begin with")
	}
	binary.LittleEndian.PutUint64(list[16:], meta.Root)
	if problems := tree.Check(bytes.NewReader(content), meta); len(problems) < 2 {
		t.Errorf("check found %v", problems)
	}
}

type failing struct{ error }

func (f failing) ReadAt([]byte, int64) (int, error) { return 0, f.error }

// TestReadErrorIsNotDamage keeps a failing disk apart from a damaged file.
func TestReadErrorIsNotDamage(t *testing.T) {
	r := tree.NewReader(tree.FileSource{File: failing{errors.New("input/output error")}}, 3, 100)
	if _, _, err := r.Bucket("x"); err == nil || errors.Is(err, damage.ErrDamaged) {
		t.Errorf("failing disk: %v", err)
	}
	r = tree.NewReader(tree.FileSource{File: failing{io.EOF}}, 3, 100)
	if _, _, err := r.Bucket("x"); !errors.Is(err, damage.ErrDamaged) {
		t.Errorf("file too short: %v", err)
	}
}

// FuzzReader feeds arbitrary bytes as a file: no panic, no endless walk.
func FuzzReader(f *testing.F) {
	f.Add(make([]byte, 5*tree.PageSize), uint64(3))
	f.Fuzz(func(t *testing.T, content []byte, root uint64) {
		highWater := uint64(len(content) / tree.PageSize)
		r := tree.NewReader(tree.FileSource{File: bytes.NewReader(content)}, root, highWater)
		_, _ = countAll(r)
		if meta, err := tree.ReadMeta(bytes.NewReader(content), int64(len(content))); err == nil {
			tree.Check(bytes.NewReader(content), meta)
		}
		if highWater > 4 {
			tree.Check(bytes.NewReader(content), tree.Meta{Root: root % highWater, Freelist: 2, HighWater: highWater})
		}
	})
}
