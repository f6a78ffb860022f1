package volume

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"testing"
	"time"

	"go.uber.org/goleak"

	"example.com/admit/storage/volume/damage"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

var testOptions = Options{Revision: "test-1", LimitBytes: 32 << 20}

var start = time.Date(2026, 11, 30, 9, 0, 0, 0, time.UTC)

// entry makes an entry as the store would see it, from its sequence alone.
func entry(sequence uint64) *Entry {
	partType := fmt.Appendf(nil, "part type %d", sequence%3)
	e := &Entry{
		Sequence:    sequence,
		TestedAt:    start.Add(time.Duration(sequence*7919%1000) * time.Second),
		ContentHash: sha256.Sum256(fmt.Appendf(nil, "content %d", sequence)),
		Payload:     bytes.Repeat(fmt.Appendf(nil, "record %d;", sequence), 1+int(sequence%50)),
		Objects:     []Object{{Kind: "part-type", Hash: sha256.Sum256(partType), Bytes: partType}},
	}
	e.Terms = []Term{
		{[]byte("id"), fmt.Appendf(nil, "id-%06d", sequence)},
		{[]byte("serial"), fmt.Appendf(nil, "TM%07d", sequence/2)},
		{[]byte("station"), fmt.Appendf(nil, "N%d", sequence%4)},
		{[]byte("tested"), binary.BigEndian.AppendUint64(nil, uint64(e.TestedAt.UnixNano()))},
	}
	e.Deltas = []Delta{
		{fmt.Appendf(nil, "hour/%d/N%d", sequence/40, sequence%4), []int64{1, int64(sequence % 2)}},
		{[]byte("total"), []int64{1}},
	}
	for i := range sequence % 3 {
		block := make([]byte, 3000+sequence%1000)
		rand.NewChaCha8(e.ContentHash).Read(block)
		e.Samples = append(e.Samples, SampleBlock{Index: uint32(2 * i), Bytes: block})
	}
	return e
}

// fill appends entries first..last in commits of varying size.
func fill(t testing.TB, v *Volume, first, last uint64) {
	t.Helper()
	for next := first; next <= last; {
		var batch []*Entry
		for n := 1 + next*31%17; n > 0 && next <= last; n, next = n-1, next+1 {
			batch = append(batch, entry(next))
		}
		if err := v.Append(batch); err != nil {
			t.Fatal(err)
		}
	}
}

func create(t testing.TB, options Options) *Volume {
	t.Helper()
	v, err := Create(t.TempDir(), 7, options)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := v.Close(); err != nil {
			t.Error(err)
		}
	})
	return v
}

// closed returns the folder of a closed volume with entries 1..n.
func closed(t testing.TB, n uint64) string {
	t.Helper()
	v := create(t, testOptions)
	fill(t, v, 1, n)
	if err := v.Retire(); err != nil {
		t.Fatal(err)
	}
	if err := v.Seal(context.Background(), []byte("id"), []byte("serial")); err != nil {
		t.Fatal(err)
	}
	return v.Folder()
}

func asRecord(e *Entry) Record {
	r := Record{
		Sequence: e.Sequence, TestedAt: e.TestedAt, ContentHash: e.ContentHash, Payload: e.Payload,
		Terms: e.Terms, Deltas: e.Deltas, Schema: 1, Revision: "test-1",
	}
	for _, o := range e.Objects {
		r.Objects = append(r.Objects, ObjectRef{o.Kind, o.Hash})
	}
	for _, s := range e.Samples {
		r.Samples = append(r.Samples, SampleRef{s.Index, uint64(len(s.Bytes)), crc(s.Bytes)})
	}
	return r
}

// TestContract holds every reading call against what was written, in each stage of a volume's life and in a copy of its folder.
func TestContract(t *testing.T) {
	t.Parallel()
	const n = 300
	v := create(t, testOptions)
	fill(t, v, 1, n)
	demands(t, "open", v, n)
	if err := v.Retire(); err != nil {
		t.Fatal(err)
	}
	demands(t, "retired", v, n)
	again, err := OpenForReading(v.Folder(), testOptions)
	if err != nil {
		t.Fatal(err)
	}
	demands(t, "retired, opened", again, n)
	if err := again.Close(); err != nil {
		t.Fatal(err)
	}
	if err := v.Seal(context.Background(), []byte("id"), []byte("serial")); err != nil {
		t.Fatal(err)
	}
	demands(t, "closed", v, n)
	elsewhere := filepath.Join(t.TempDir(), "copy")
	if err := os.CopyFS(elsewhere, os.DirFS(v.Folder())); err != nil {
		t.Fatal(err)
	}
	copied, err := OpenForReading(elsewhere, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer copied.Close()
	demands(t, "copied", copied, n)
	if got, want := copied.Info(), v.Info(); got != want {
		t.Errorf("info of the copy: %+v, of the original: %+v", got, want)
	}
	if err := v.Append([]*Entry{entry(n + 1)}); !errors.Is(err, ErrNotOpen) {
		t.Errorf("append to a closed volume: %v", err)
	}
	if _, err := OpenForWriting(v.Folder(), testOptions); !errors.Is(err, ErrNotOpen) {
		t.Errorf("open a closed volume for writing: %v", err)
	}
}

func demands(t *testing.T, stage string, v *Volume, n uint64) {
	t.Helper()
	t.Run(stage, func(t *testing.T) {
		byTerm := make(map[string][]uint64)
		counters := make(map[string][]int64)
		for s := uint64(1); s <= n; s++ {
			e := entry(s)
			for _, term := range e.Terms {
				key := string(term.Name) + "=" + string(term.Value)
				byTerm[key] = append(byTerm[key], s)
			}
			for _, d := range e.Deltas {
				counters[string(d.Key)] = addNumbers(counters[string(d.Key)], d.Values)
			}
			demandEntry(t, v, e)
		}
		demandTerms(t, v, byTerm)
		demandRecords(t, v, n)
		demandRange(t, v, n)
		demandCounters(t, v, counters)
		demandAbsence(t, v, n)
		report, err := v.Verify(context.Background())
		if err != nil || report.Err() != nil || report.Orphans != 0 {
			t.Errorf("verify: %v, %+v", err, report)
		}
		if age := v.OldestRead(); age != 0 {
			t.Errorf("a read transaction is open since %v", age)
		}
	})
}

func demandEntry(t *testing.T, v *Volume, e *Entry) {
	t.Helper()
	record, err := v.Record(e.Sequence)
	if err != nil {
		t.Fatal(err)
	}
	if d := diff(asRecord(e), record); d != "" {
		t.Fatalf("record %d: %s", e.Sequence, d)
	}
	blocks, err := v.Samples(e.Sequence)
	if err != nil {
		t.Fatal(err)
	}
	if d := diff(e.Samples, blocks); d != "" {
		t.Fatalf("samples of %d: %s", e.Sequence, d)
	}
	for _, s := range e.Samples {
		one, err := v.Samples(e.Sequence, s.Index)
		if err != nil || len(one) != 1 || !bytes.Equal(one[0].Bytes, s.Bytes) {
			t.Fatalf("sample %d of %d: %v", s.Index, e.Sequence, err)
		}
	}
	for _, o := range e.Objects {
		content, err := v.Object(ObjectRef{o.Kind, o.Hash})
		if err != nil || !bytes.Equal(content, o.Bytes) {
			t.Fatalf("object of %d: %q, %v", e.Sequence, content, err)
		}
	}
}

func demandTerms(t *testing.T, v *Volume, byTerm map[string][]uint64) {
	t.Helper()
	for key, want := range byTerm {
		name, value, _ := bytes.Cut([]byte(key), []byte("="))
		term := Term{name, value}
		if !v.MayHold(term) {
			t.Errorf("the filter denies %q", key)
		}
		if got, err := v.ByTerm(term, 0, 0, Ascending); err != nil || !slices.Equal(got, want) {
			t.Fatalf("%q ascending: %v, want %v (%v)", key, got, want, err)
		}
		// Descending in pages of two, each beginning behind the one before.
		var got []uint64
		for from := Newest; ; {
			page, err := v.ByTerm(term, from, 2, Descending)
			if err != nil {
				t.Fatal(err)
			}
			got = append(got, page...)
			if len(page) < 2 {
				break
			}
			from = page[1] - 1
		}
		slices.Reverse(got)
		if !slices.Equal(got, want) {
			t.Fatalf("%q descending: %v, want %v", key, got, want)
		}
	}
}

func demandRecords(t *testing.T, v *Volume, n uint64) {
	t.Helper()
	up, err := v.Records(n/2, 10, Ascending)
	if want := int(min(10, n-n/2+1)); err != nil || len(up) != want || up[0].Sequence != n/2 {
		t.Errorf("records from %d: %d, %v", n/2, len(up), err)
	}
	down, err := v.Records(Newest, 10, Descending)
	if err != nil || len(down) != 10 || down[0].Sequence != n || down[9].Sequence != n-9 {
		t.Errorf("newest records: %d, %v", len(down), err)
	}
	if rest, err := v.Records(n+1, 10, Ascending); err != nil || len(rest) != 0 {
		t.Errorf("records behind the last: %d, %v", len(rest), err)
	}
}

func demandRange(t *testing.T, v *Volume, n uint64) {
	t.Helper()
	low, high := start.Add(200*time.Second), start.Add(500*time.Second)
	var want []Hit
	for s := uint64(1); s <= n; s++ {
		if e := entry(s); !e.TestedAt.Before(low) && !e.TestedAt.After(high) {
			want = append(want, Hit{e.Terms[3].Value, s})
		}
	}
	slices.SortFunc(want, func(a, b Hit) int { return bytes.Compare(a.Value, b.Value) })
	for _, order := range []Order{Ascending, Descending} {
		var got []Hit
		query := Range{Name: []byte("tested"), Order: order, Limit: 7}
		query.Low = binary.BigEndian.AppendUint64(nil, uint64(low.UnixNano()))
		query.High = binary.BigEndian.AppendUint64(nil, uint64(high.UnixNano()))
		for {
			page, err := v.ByRange(query)
			if err != nil {
				t.Fatal(err)
			}
			got = append(got, page...)
			if len(page) < query.Limit {
				break
			}
			query.After = &page[len(page)-1]
		}
		if d := diff(want, got); d != "" {
			t.Fatalf("range, order %d: %s", order, d)
		}
		slices.Reverse(want)
	}
	all, err := v.ByRange(Range{Name: []byte("station"), Limit: 1000, Order: Descending})
	if err != nil || uint64(len(all)) != n {
		t.Errorf("all stations: %d hits, want %d (%v)", len(all), n, err)
	}
}

func demandCounters(t *testing.T, v *Volume, want map[string][]int64) {
	t.Helper()
	got := make(map[string][]int64)
	var after []byte
	for {
		page, err := v.Counters(nil, after, 5)
		if err != nil {
			t.Fatal(err)
		}
		for _, c := range page {
			got[string(c.Key)] = c.Values
		}
		if len(page) < 5 {
			break
		}
		after = page[4].Key
	}
	if d := diff(want, got); d != "" {
		t.Fatalf("counters: %s", d)
	}
	hour, err := v.Counters([]byte("hour/1/"), nil, 0)
	if err != nil || len(hour) != 4 && len(want) > 9 {
		t.Errorf("counters of an hour: %v, %v", hour, err)
	}
}

func demandAbsence(t *testing.T, v *Volume, n uint64) {
	t.Helper()
	for _, s := range []uint64{0, n + 1, Newest} {
		if _, err := v.Record(s); !errors.Is(err, ErrNotFound) {
			t.Errorf("record %d: %v", s, err)
		}
	}
	if _, err := v.Samples(1, 99); !errors.Is(err, ErrNotFound) {
		t.Errorf("sample 99: %v", err)
	}
	if _, err := v.Object(ObjectRef{Kind: "part-type"}); !errors.Is(err, ErrNotFound) {
		t.Errorf("object of another hash: %v", err)
	}
	for _, value := range []string{"", "N", "N00", "Z"} {
		if got, err := v.ByTerm(Term{[]byte("station"), []byte(value)}, Newest, 10, Descending); err != nil || len(got) > 0 {
			t.Errorf("station %q: %v, %v", value, got, err)
		}
	}
	if v.Info().Stage != Closed {
		return
	}
	held := 0
	for i := range 1000 {
		if v.MayHold(Term{[]byte("id"), fmt.Appendf(nil, "id-0001%02d-%d", i%100, i)}) {
			held++
		}
	}
	// Inside the bounds, so only the bits decide; a filter that always says "perhaps" would be useless.
	if held > 20 {
		t.Errorf("the filter lets %d of 1000 absent ids through", held)
	}
	if v.MayHold(Term{[]byte("id"), []byte("id-9")}) {
		t.Error("the filter ignores its bounds")
	}
}

func TestReopen(t *testing.T) {
	t.Parallel()
	v := create(t, testOptions)
	fill(t, v, 1, 100)
	want := v.Info()
	if err := v.Close(); err != nil {
		t.Fatal(err)
	}
	if _, err := v.Record(1); err == nil {
		t.Error("a closed volume answers")
	}
	again, err := OpenForWriting(v.Folder(), testOptions)
	if err != nil {
		t.Fatal(err)
	}
	defer again.Close()
	got := again.Info()
	if got.Age < want.Age-time.Second {
		t.Errorf("the age fell from %v to %v", want.Age, got.Age)
	}
	got.Age, want.Age = 0, 0
	if got != want {
		t.Errorf("info %+v, before %+v", got, want)
	}
	fill(t, again, 101, 300)
	demands(t, "continued", again, 300)
}

func TestAppendRefuses(t *testing.T) {
	v := create(t, testOptions)
	fill(t, v, 1, 3)
	long := bytes.Repeat([]byte("x"), 2000)
	for _, c := range []struct {
		name   string
		change func(e *Entry)
	}{
		{"sequence used", func(e *Entry) { e.Sequence = 3 }},
		{"no payload", func(e *Entry) { e.Payload = nil }},
		{"time out of range", func(e *Entry) { e.TestedAt = time.Time{} }},
		{"term without name", func(e *Entry) { e.Terms = []Term{{nil, []byte("x")}} }},
		{"long term", func(e *Entry) { e.Terms = []Term{{[]byte("id"), long}} }},
		{"many terms", func(e *Entry) { e.Terms = make([]Term, MaxTerms+1) }},
		{"empty delta", func(e *Entry) { e.Deltas = []Delta{{[]byte("k"), nil}} }},
		{"huge delta", func(e *Entry) { e.Deltas = []Delta{{[]byte("k"), []int64{1 << 40}}} }},
		{"wrong hash", func(e *Entry) { e.Objects[0].Hash[0]++ }},
		{"object without kind", func(e *Entry) { e.Objects[0].Kind = "" }},
		{"samples out of order", func(e *Entry) { e.Samples = []SampleBlock{{Index: 1}, {Index: 1}} }},
	} {
		t.Run(c.name, func(t *testing.T) {
			bad := entry(5)
			c.change(bad)
			if err := v.Append([]*Entry{entry(4), bad}); !errors.Is(err, ErrInvalid) {
				t.Errorf("append: %v", err)
			}
			if got := v.NextSequence(); got != 4 {
				t.Errorf("next sequence is %d after a refusal", got)
			}
		})
	}
	fill(t, v, 4, 10)
	demands(t, "undisturbed", v, 10)
}

func TestCreateRefusesWhatExists(t *testing.T) {
	v := create(t, testOptions)
	if _, err := Create(filepath.Dir(v.Folder()), 7, testOptions); err == nil {
		t.Error("a second volume 7 was made")
	}
	if _, err := Create(filepath.Dir(v.Folder()), 0, testOptions); !errors.Is(err, ErrInvalid) {
		t.Errorf("volume 0: %v", err)
	}
}

func TestSecondOpenerWaitsNotForEver(t *testing.T) {
	t.Parallel()
	v := create(t, testOptions)
	began := time.Now()
	_, err := OpenForWriting(v.Folder(), testOptions)
	if err == nil || time.Since(began) > 3*time.Second {
		t.Errorf("second opener after %v: %v", time.Since(began), err)
	}
}

// TestDroppedSamples is retention: the samples file of a closed volume is deleted, everything else stays.
func TestDroppedSamples(t *testing.T) {
	t.Parallel()
	folder := closed(t, 50)
	if err := os.Remove(filepath.Join(folder, samplesName)); err != nil {
		t.Fatal(err)
	}
	v, err := OpenForReading(folder, testOptions)
	if err != nil {
		t.Fatal(err)
	}
	defer v.Close()
	if _, err := v.Samples(2); !errors.Is(err, ErrNoSamples) {
		t.Errorf("samples: %v", err)
	}
	if r, err := v.Record(2); err != nil || len(r.Samples) != 2 {
		t.Errorf("record: %v, %v", r.Samples, err)
	}
	if v.Info().SamplesKept {
		t.Error("the samples count as kept")
	}
	if report, err := v.Verify(context.Background()); err != nil || report.Err() != nil {
		t.Errorf("verify: %v, %v", err, report.Err())
	}
}

// TestFilesOfTwoVolumes mixes files of two volumes, which each are sound.
func TestFilesOfTwoVolumes(t *testing.T) {
	t.Parallel()
	one, other := closed(t, 20), closed(t, 20)
	for _, name := range []string{samplesName, sumsName} {
		folder := filepath.Join(t.TempDir(), "mixed")
		if err := os.CopyFS(folder, os.DirFS(one)); err != nil {
			t.Fatal(err)
		}
		content, err := os.ReadFile(filepath.Join(other, name))
		if err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(folder, name), content, 0o600); err != nil {
			t.Fatal(err)
		}
		if v, err := OpenForReading(folder, testOptions); !errors.Is(err, damage.ErrDamaged) {
			t.Errorf("%s of another volume: %v", name, err)
			v.Close()
		}
	}
}
