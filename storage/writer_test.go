package storage

import (
	"bytes"
	"context"
	"crypto/sha256"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"sync"
	"testing"
	"time"

	"go.uber.org/goleak"

	"example.com/admit/storage/volume"
)

// child names what a re-executed test binary should do instead of testing; see child_test.go.
const childVariable = "ADMIT_STORAGE_TEST_CHILD"

func TestMain(m *testing.M) {
	if what := os.Getenv(childVariable); what != "" {
		os.Exit(runChild(what))
	}
	goleak.VerifyTestMain(m)
}

var tested = time.Date(2026, 11, 30, 9, 0, 0, 0, time.UTC)

// content is what the submission named id should look like in the store: all of it follows from the id.
func content(id string) (payload []byte, samples []volume.SampleBlock, hash [32]byte) {
	hash = sha256.Sum256([]byte(id))
	random := rand.NewChaCha8(hash)
	payload = make([]byte, 200+int(hash[0])*8)
	_, _ = random.Read(payload)
	for i := range int(hash[1] % 3) {
		block := make([]byte, 500+int(hash[2])*20)
		_, _ = random.Read(block)
		samples = append(samples, volume.SampleBlock{Index: uint32(i), Bytes: block})
	}
	return payload, samples, hash
}

func submission(id string) Submission {
	payload, samples, hash := content(id)
	partType := []byte("part type " + id[len(id)-1:])
	return Submission{
		ID: []byte(id), ContentHash: hash, Bytes: int64(len(payload)),
		Prepare: func(uint64, Lookup) (volume.Entry, error) {
			return volume.Entry{
				TestedAt: tested, Payload: payload, Samples: samples,
				Terms:   []volume.Term{{Name: []byte("station"), Value: []byte{'N', '1' + hash[3]%4}}},
				Deltas:  []volume.Delta{{Key: []byte("total"), Values: []int64{1}}},
				Objects: []volume.Object{{Kind: "part-type", Hash: sha256.Sum256(partType), Bytes: partType}},
			}, nil
		},
	}
}

func openWriter(t testing.TB, o WriterOptions) *Writer {
	t.Helper()
	w, err := OpenWriter(o)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { closeWriter(t, w) })
	return w
}

func closeWriter(t testing.TB, w *Writer) {
	t.Helper()
	if err := w.Close(); err != nil {
		t.Errorf("close: %v", err)
	}
}

func options(t testing.TB) WriterOptions {
	t.Helper()
	return WriterOptions{Folder: t.TempDir(), Revision: "test-1", VolumeBytes: 32 << 20}
}

func submit(t testing.TB, w *Writer, id string) Result {
	t.Helper()
	r, err := w.Submit(context.Background(), submission(id))
	if err != nil {
		t.Fatalf("submit %s: %v", id, err)
	}
	return r
}

// findAll returns the sequences under which an id is recorded, over all volumes.
func findAll(w *Writer, id string) (sequences []uint64, err error) {
	for _, s := range w.Volumes() {
		v, err := w.Volume(s.Number)
		if err != nil {
			return nil, err
		}
		found, err := v.ByTerm(volume.Term{Name: []byte("id"), Value: []byte(id)}, 0, 10, volume.Ascending)
		if err != nil {
			return nil, err
		}
		sequences = append(sequences, found...)
	}
	return sequences, nil
}

// holds demands that an id is recorded once, whole, where the result says.
func holds(t testing.TB, w *Writer, id string, r Result) {
	t.Helper()
	sequences, err := findAll(w, id)
	if err != nil || len(sequences) != 1 || sequences[0] != r.Sequence {
		t.Errorf("%s is recorded as %v, want %d (%v)", id, sequences, r.Sequence, err)
		return
	}
	v, err := w.Volume(r.Volume)
	if err != nil {
		t.Error(err)
		return
	}
	record, err := v.Record(r.Sequence)
	payload, samples, hash := content(id)
	if err != nil || !bytes.Equal(record.Payload, payload) || record.ContentHash != hash {
		t.Errorf("%s: record %d is not what was submitted (%v)", id, r.Sequence, err)
	}
	blocks, err := v.Samples(r.Sequence)
	if err != nil || len(blocks) != len(samples) {
		t.Errorf("%s: %d sample blocks, want %d (%v)", id, len(blocks), len(samples), err)
	}
	for i := range blocks {
		if !bytes.Equal(blocks[i].Bytes, samples[i].Bytes) {
			t.Errorf("%s: sample block %d differs", id, i)
		}
	}
}

// total adds up the counter that every submission increases.
func total(t testing.TB, w *Writer) (sum int64) {
	t.Helper()
	for _, s := range w.Volumes() {
		v, err := w.Volume(s.Number)
		if err != nil {
			t.Fatal(err)
		}
		counters, err := v.Counters([]byte("total"), nil, 0)
		if err != nil {
			t.Fatal(err)
		}
		for _, c := range counters {
			sum += c.Values[0]
		}
	}
	return sum
}

// verified demands that all volumes are sound.
func verified(t testing.TB, w *Writer) {
	t.Helper()
	for _, s := range w.Volumes() {
		v, err := w.Volume(s.Number)
		if err != nil {
			t.Error(err)
			continue
		}
		report, err := v.Verify(context.Background())
		if err != nil || report.Err() != nil {
			t.Errorf("volume %d: %v, %v", s.Number, err, report.Err())
		}
	}
}

// TestManyWriters records from many goroutines at once, over several volumes, and looks at everything before and after a restart.
func TestManyWriters(t *testing.T) {
	t.Parallel()
	for _, writers := range []int{1, 8, 64} {
		t.Run(fmt.Sprint(writers), func(t *testing.T) {
			t.Parallel()
			o := options(t)
			o.VolumeBytes = 300 << 10
			w := openWriter(t, o)
			results := make([]map[string]Result, writers)
			var group sync.WaitGroup
			for i := range results {
				results[i] = make(map[string]Result)
				group.Go(func() {
					for n := range max(3, 128/writers) {
						id := fmt.Sprintf("writer %d submission %d", i, n)
						results[i][id] = submit(t, w, id)
					}
				})
			}
			group.Wait()
			demand := func(w *Writer) {
				seen := make(map[uint64]bool)
				count := 0
				for _, some := range results {
					for id, r := range some {
						holds(t, w, id, r)
						if seen[r.Sequence] {
							t.Errorf("sequence %d was given twice", r.Sequence)
						}
						seen[r.Sequence] = true
						count++
					}
				}
				if got := total(t, w); got != int64(count) {
					t.Errorf("counted %d, recorded %d", got, count)
				}
				verified(t, w)
			}
			demand(w)
			if n := len(w.Volumes()); n < 2 {
				t.Errorf("only %d volume: the roll-over was not tried", n)
			}
			closeWriter(t, w)
			again := openWriter(t, o)
			demand(again)
			last, _ := again.Last()
			if r := submit(t, again, "one more"); r.Sequence <= last {
				t.Errorf("sequence %d after %d", r.Sequence, last)
			}
		})
	}
}

// TestOnce sends the same submission again and again: in sequence, at once, in one commit, after a restart, after its volume was closed. It
// counts once, and the answer is always the same place.
func TestOnce(t *testing.T) {
	t.Parallel()
	o := options(t)
	w := openWriter(t, o)
	first := submit(t, w, "TM0000001")
	if first.AlreadyRecorded {
		t.Error("the first is said to be recorded already")
	}
	again := func(w *Writer) {
		t.Helper()
		r := submit(t, w, "TM0000001")
		if !r.AlreadyRecorded || r.Sequence != first.Sequence || r.Volume != first.Volume {
			t.Errorf("answer %+v, first %+v", r, first)
		}
		other := submission("TM0000001")
		other.ContentHash[0]++
		if _, err := w.Submit(context.Background(), other); !errors.Is(err, ErrDifferentContent) {
			t.Errorf("other content: %v", err)
		}
	}
	for range 1000 {
		again(w)
	}
	var group sync.WaitGroup
	atOnce := make([]Result, 50)
	for i := range atOnce {
		group.Go(func() { atOnce[i] = submit(t, w, "TM0000002") })
	}
	group.Wait()
	recorded := 0
	for _, r := range atOnce {
		if r.Sequence != atOnce[0].Sequence {
			t.Errorf("50 at once got sequences %d and %d", atOnce[0].Sequence, r.Sequence)
		}
		if !r.AlreadyRecorded {
			recorded++
		}
	}
	if recorded != 1 {
		t.Errorf("%d of 50 were told that theirs was recorded now", recorded)
	}
	closeWriter(t, w)
	w = openWriter(t, o)
	again(w)
	for range 3 {
		if _, err := w.CloseVolume(context.Background()); err != nil {
			t.Fatal(err)
		}
		submit(t, w, fmt.Sprintf("filler %d", len(w.Volumes())))
		again(w)
	}
	closeWriter(t, w)
	w = openWriter(t, o)
	again(w)
	holds(t, w, "TM0000001", first)
	if got := total(t, w); got != 5 {
		t.Errorf("counted %d, want 5", got)
	}
}

// hold makes the writer wait in a submission's Prepare, so that what is submitted meanwhile goes into one commit. The returned function lets it
// go on and waits for the submission.
func hold(t *testing.T, w *Writer) (release func()) {
	t.Helper()
	held, goOn, done := make(chan struct{}), make(chan struct{}), make(chan struct{})
	go func() {
		defer close(done)
		s := submission("held up")
		prepare := s.Prepare
		s.Prepare = func(sequence uint64, look Lookup) (volume.Entry, error) {
			close(held)
			<-goOn
			return prepare(sequence, look)
		}
		if _, err := w.Submit(context.Background(), s); err != nil {
			t.Error(err)
		}
	}()
	<-held
	return func() {
		close(goOn)
		<-done
	}
}

// awaitQueue waits until that many submissions wait.
func awaitQueue(t *testing.T, w *Writer, n int) {
	t.Helper()
	for deadline := time.Now().Add(10 * time.Second); w.Status().Waiting < n; time.Sleep(time.Millisecond) {
		if time.Now().After(deadline) {
			t.Fatalf("%d submissions wait, want %d", w.Status().Waiting, n)
		}
	}
}

// TestOnceInOneCommit brings equal ids into the same commit: the first is recorded, the others get its place, other content is refused. The
// first may fail in Prepare: then the next of the same id has its turn.
func TestOnceInOneCommit(t *testing.T) {
	t.Parallel()
	w := openWriter(t, options(t))
	release := hold(t, w)
	var group sync.WaitGroup
	inOrder := func(n int, s Submission, judge func(Result, error)) {
		group.Go(func() { judge(w.Submit(context.Background(), s)) })
		awaitQueue(t, w, n)
	}
	refusing := submission("twice")
	refusing.Prepare = func(uint64, Lookup) (volume.Entry, error) { return volume.Entry{}, errors.New("no") }
	other := submission("twice")
	other.ContentHash[5]++
	var first, second Result
	inOrder(2, refusing, func(r Result, err error) {
		if err == nil {
			t.Errorf("a refused submission was recorded as %+v", r)
		}
	})
	inOrder(3, submission("twice"), func(r Result, err error) {
		if first = r; err != nil || r.AlreadyRecorded {
			t.Errorf("first: %+v, %v", r, err)
		}
	})
	inOrder(4, submission("twice"), func(r Result, err error) {
		if second = r; err != nil || !r.AlreadyRecorded {
			t.Errorf("second: %+v, %v", r, err)
		}
	})
	inOrder(5, other, func(r Result, err error) {
		if !errors.Is(err, ErrDifferentContent) {
			t.Errorf("other content: %+v, %v", r, err)
		}
	})
	release()
	group.Wait()
	if first.Sequence != second.Sequence {
		t.Errorf("first %+v, second %+v", first, second)
	}
	holds(t, w, "twice", first)
	if got := total(t, w); got != 2 {
		t.Errorf("counted %d, want 2", got)
	}
}

// TestPrepareSeesWhatCameBefore counts attempts of one unit from many goroutines: each sees all earlier ones, those of its own commit
// and those in closed volumes included.
func TestPrepareSeesWhatCameBefore(t *testing.T) {
	t.Parallel()
	o := options(t)
	o.FilterTerms = [][]byte{[]byte("unit")}
	w := openWriter(t, o)
	unit := volume.Term{Name: []byte("unit"), Value: []byte("TM0000001")}
	attempt := func(id string) {
		s := submission(id)
		_, err := w.Submit(context.Background(), Submission{ID: s.ID, ContentHash: s.ContentHash,
			Prepare: func(sequence uint64, look Lookup) (volume.Entry, error) {
				before, err := look.Newest(unit, 100)
				if err != nil {
					return volume.Entry{}, err
				}
				for i := 1; i < len(before); i++ {
					if before[i].Sequence >= before[i-1].Sequence {
						return volume.Entry{}, errors.New("not newest first")
					}
				}
				if len(before) > 0 && before[0].Sequence >= sequence {
					return volume.Entry{}, errors.New("an entry of the future")
				}
				return volume.Entry{TestedAt: tested, Payload: fmt.Appendf(nil, "attempt %d", len(before)+1),
					Terms: []volume.Term{unit}}, nil
			}})
		if err != nil {
			t.Error(err)
		}
	}
	for round := range 3 {
		var group sync.WaitGroup
		for i := range 20 {
			group.Go(func() { attempt(fmt.Sprintf("%d-%d", round, i)) })
		}
		group.Wait()
		if _, err := w.CloseVolume(context.Background()); err != nil {
			t.Fatal(err)
		}
	}
	seen := make(map[string]bool)
	for _, s := range w.Volumes() {
		v, err := w.Volume(s.Number)
		if err != nil {
			t.Fatal(err)
		}
		records, err := v.Records(0, 100, volume.Ascending)
		if err != nil {
			t.Fatal(err)
		}
		for _, r := range records {
			seen[string(r.Payload)] = true
		}
	}
	for i := range 60 {
		if !seen[fmt.Sprintf("attempt %d", i+1)] {
			t.Errorf("no attempt %d: some entry did not see another", i+1)
		}
	}
}

// TestPrepareRefuses makes Prepare fail in several ways beside good submissions: only the bad ones are refused.
func TestPrepareRefuses(t *testing.T) {
	t.Parallel()
	w := openWriter(t, options(t))
	mine := errors.New("mine")
	bad := map[string]func(uint64, Lookup) (volume.Entry, error){
		"error": func(uint64, Lookup) (volume.Entry, error) { return volume.Entry{}, mine },
		"panic": func(uint64, Lookup) (volume.Entry, error) { panic("mine") },
		"entry": func(uint64, Lookup) (volume.Entry, error) { return volume.Entry{TestedAt: tested}, nil },
		"object": func(uint64, Lookup) (volume.Entry, error) {
			return volume.Entry{TestedAt: tested, Payload: []byte("x"), Objects: []volume.Object{{Kind: "k", Bytes: []byte("x")}}}, nil
		},
	}
	var group sync.WaitGroup
	for name, f := range bad {
		group.Go(func() {
			_, err := w.Submit(context.Background(), Submission{ID: []byte(name), Prepare: f})
			if err == nil || name == "error" && !errors.Is(err, mine) || name == "entry" && !errors.Is(err, volume.ErrInvalid) {
				t.Errorf("%s: %v", name, err)
			}
		})
		group.Go(func() { submit(t, w, "good "+name) })
	}
	group.Wait()
	for name := range bad {
		if found, err := findAll(w, name); err != nil || len(found) > 0 {
			t.Errorf("%s was recorded: %v, %v", name, found, err)
		}
		// The id is still free.
		holds(t, w, name, submit(t, w, name))
	}
	for _, s := range []Submission{{}, {ID: []byte("x")}, {Prepare: submission("x").Prepare}} {
		if _, err := w.Submit(context.Background(), s); !errors.Is(err, volume.ErrInvalid) {
			t.Errorf("incomplete submission: %v", err)
		}
	}
}

// TestClose records what waits, and refuses what comes later.
func TestClose(t *testing.T) {
	t.Parallel()
	o := options(t)
	w := openWriter(t, o)
	var group sync.WaitGroup
	var mu sync.Mutex
	done := make(map[string]Result)
	refused := 0
	for i := range 40 {
		group.Go(func() {
			id := fmt.Sprintf("id %d", i)
			r, err := w.Submit(context.Background(), submission(id))
			mu.Lock()
			defer mu.Unlock()
			switch {
			case err == nil:
				done[id] = r
			case errors.Is(err, ErrClosed):
				refused++
			default:
				t.Errorf("%s: %v", id, err)
			}
		})
	}
	for last, changed := w.Last(); last == 0; last, changed = w.Last() {
		<-changed
	}
	closeWriter(t, w)
	group.Wait()
	if len(done) == 0 || len(done)+refused != 40 {
		t.Errorf("%d recorded, %d refused", len(done), refused)
	}
	closeWriter(t, w)
	if _, err := w.Submit(context.Background(), submission("late")); !errors.Is(err, ErrClosed) {
		t.Errorf("submit after close: %v", err)
	}
	again := openWriter(t, o)
	for id, r := range done {
		holds(t, again, id, r)
	}
	if got := total(t, again); got != int64(len(done)) {
		t.Errorf("counted %d, acknowledged %d", got, len(done))
	}
}
