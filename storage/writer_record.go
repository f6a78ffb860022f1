package storage

import (
	"errors"
	"fmt"
	"log/slog"
	"slices"

	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/pagefile"
)

// run is the recording goroutine: it takes what waits, commits it, answers, until the queue is closed and empty.
func (w *Writer) run() {
	for {
		batch := w.queue.take(w.options.BatchEntries, w.options.BatchBytes)
		if batch == nil {
			return
		}
		if request := batch[0].request; request != nil {
			batch[0].answer <- answer{err: request()}
		} else {
			w.record(batch)
		}
		w.queue.answered(batch)
	}
}

// errAgain says that the open volume was replaced, and the batch can be tried in the new one.
var errAgain = errors.New("another volume is open now")

// record commits a batch and answers every submission in it.
func (w *Writer) record(batch []*waiting) {
	// Nobody is left to hear of a submission whose caller is gone. One that leaves later may be recorded or not.
	var live []*waiting
	for _, item := range batch {
		if err := item.ctx.Err(); err != nil {
			item.answer <- answer{err: err}
		} else {
			live = append(live, item)
		}
	}
	for {
		if w.failure != nil {
			refuse(live, fmt.Errorf("%w: %w", ErrStorageFailed, w.failure))
			return
		}
		if w.rollDue() {
			w.roll()
		}
		r := w.draft(live)
		err := w.commit(r)
		if errors.Is(err, errAgain) {
			// Only what was not answered yet; preparing it again is harmless.
			live = r.unanswered()
			continue
		}
		refuse(r.rest, err)
		r.answer(err, w.shelf.current().number)
		return
	}
}

func refuse(items []*waiting, err error) {
	for _, item := range items {
		item.answer <- answer{err: err}
	}
}

// draft looks every id up and prepares the entries. Submissions that are settled by that are answered.
func (w *Writer) draft(items []*waiting) *round {
	r := &round{writer: w, volumes: w.shelf.all(), byID: make(map[string]int, len(items))}
	slices.Reverse(r.volumes)
	current := r.volumes[0].volume
	next := max(w.next, current.NextSequence())
	for i, item := range items {
		s := item.submission
		if of, found := r.byID[string(s.ID)]; found {
			first := r.drafts[of].item.submission
			r.late = append(r.late, follower{item, of, first.ContentHash != s.ContentHash})
			continue
		}
		found, known, err := r.find(s.ID)
		if r.damage != nil && w.options.SetAsideDamaged {
			r.rest = items[i:]
			return r
		}
		switch {
		case err != nil:
			item.answer <- answer{err: err}
			continue
		case known && found.record.ContentHash != s.ContentHash:
			item.answer <- answer{err: differs(s.ID, found.record.Sequence)}
			continue
		case known:
			item.answer <- answer{result: Result{Sequence: found.record.Sequence, Volume: found.volume, AlreadyRecorded: true}}
			continue
		}
		entry, err := prepare(s, next, r)
		if err == nil {
			entry.Sequence, entry.ContentHash = next, s.ContentHash
			entry.Terms = append(slices.Clip(entry.Terms), volume.Term{Name: w.options.IDTerm, Value: s.ID})
			err = current.Check(&entry)
		}
		if err != nil {
			item.answer <- answer{err: err}
			continue
		}
		r.byID[string(s.ID)] = len(r.drafts)
		r.drafts = append(r.drafts, draft{item, &entry})
		next++
	}
	return r
}

func differs(id []byte, sequence uint64) error {
	return fmt.Errorf("%w: %x, recorded with sequence %d", ErrDifferentContent, id, sequence)
}

// prepare calls the submitter's function. A panic in it is that submission's error, not the end of the store.
func prepare(s Submission, sequence uint64, look Lookup) (entry volume.Entry, err error) {
	defer func() {
		if r := recover(); r != nil {
			err = fmt.Errorf("prepare panicked: %v", r)
		}
	}()
	return s.Prepare(sequence, look)
}

// commit puts the drafts on disk and moves the mark. A nil error means that they may be acknowledged.
func (w *Writer) commit(r *round) error {
	current := w.shelf.current()
	if len(r.rest) > 0 {
		return w.moveOn(current, r.damage)
	}
	if len(r.drafts) == 0 {
		return nil
	}
	entries := make([]*volume.Entry, len(r.drafts))
	for i, d := range r.drafts {
		entries[i] = d.entry
	}
	began := w.options.Clock()
	err := current.volume.Append(entries)
	switch {
	case err == nil:
	case errors.Is(err, pagefile.ErrFailed):
		return w.fail(err)
	case errors.Is(err, ErrFull):
		w.options.Logger.Warn("store_full", slog.String("error", err.Error()))
		return err
	case errors.Is(err, damage.ErrDamaged) && w.options.SetAsideDamaged:
		// The transaction was rolled back: the entries are nowhere yet.
		return w.moveOn(current, err)
	default:
		return w.fail(err)
	}
	last := entries[len(entries)-1].Sequence
	w.next = last + 1
	if err := w.mark.move(position{current.number, last}); err != nil {
		return w.fail(err)
	}
	w.publish()
	if w.options.Committed != nil {
		w.options.Committed(max(0, w.options.Clock().Sub(began)), len(entries))
	}
	return nil
}

// moveOn sets the open volume aside; its error makes the batch be tried again in the new one.
func (w *Writer) moveOn(current *shelved, cause error) error {
	if err := w.setAside(current, cause); err != nil {
		return w.fail(errors.Join(cause, err))
	}
	return errAgain
}

// fail ends acknowledging.
func (w *Writer) fail(cause error) error {
	w.failure = cause
	w.mu.Lock()
	w.failed = cause
	w.mu.Unlock()
	w.options.Logger.Error("storage_failed", slog.String("error", cause.Error()))
	return fmt.Errorf("%w: %w", ErrStorageFailed, cause)
}

// publish tells readers how far they may look.
func (w *Writer) publish() {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.last = w.mark.at
	close(w.changed)
	w.changed = make(chan struct{})
}

// answer gives every submission of the round what became of it.
func (r *round) answer(err error, number uint64) {
	for _, d := range r.drafts {
		d.item.answer <- answer{result: Result{Sequence: d.entry.Sequence, Volume: number}, err: err}
	}
	for _, f := range r.late {
		first := r.drafts[f.of].entry.Sequence
		a := answer{result: Result{Sequence: first, Volume: number, AlreadyRecorded: true}, err: err}
		if err == nil && f.differs {
			a = answer{err: differs(f.item.submission.ID, first)}
		}
		f.item.answer <- a
	}
}

// unanswered returns the submissions of the round that still wait, in the order they came.
func (r *round) unanswered() []*waiting {
	var items []*waiting
	for _, d := range r.drafts {
		items = append(items, d.item)
	}
	for _, f := range r.late {
		items = append(items, f.item)
	}
	return append(items, r.rest...)
}
