package storage

import (
	"context"
	"errors"
	"fmt"
	"log/slog"

	"example.com/admit/storage/volume"
)

// rollDue says whether the next volume should begin. An empty one never gives way.
func (w *Writer) rollDue() bool {
	info := w.shelf.current().volume.Info()
	return info.Records > 0 && (info.RecordsBytes+info.SamplesBytes >= w.options.VolumeBytes || info.Age >= w.options.VolumeAge)
}

// roll begins the next volume and hands the old one over to be closed. When that fails, recording simply goes on where it was, and the
// next batch tries again: a full disk, say, is not made worse by it.
func (w *Writer) roll() {
	old := w.shelf.current()
	if err := w.begin(old.number + 1); err != nil {
		w.options.Logger.Warn("roll_over_failed", slog.Uint64("volume", old.number), slog.String("error", err.Error()))
		return
	}
	w.options.Logger.Info("volume_rolled_over", slog.Uint64("volume", old.number))
	w.sealer.add(old)
}

// begin makes a volume the open one: first the volume, then its row in the manifest. A crash between the two leaves an empty volume that the
// next opening takes up.
func (w *Writer) begin(number uint64) error {
	if w.spare == nil {
		fresh, err := volume.Create(w.options.Folder, number, w.options.volume())
		if err != nil {
			return err
		}
		w.spare = fresh
	}
	if err := w.catalogue.PutVolume(w.spare.Info()); err != nil {
		return err
	}
	w.shelf.add(&shelved{number: number, volume: w.spare, row: w.spare.Info()})
	w.spare = nil
	return nil
}

// setAside leaves a damaged open volume as it is and goes on in a new one.
func (w *Writer) setAside(s *shelved, cause error) error {
	row := s.info()
	row.Stage = volume.SetAside
	if err := w.catalogue.PutVolume(row); err != nil {
		return err
	}
	s.setDamage(cause)
	w.options.Logger.Error("volume_set_aside", slog.Uint64("volume", s.number), slog.String("error", cause.Error()))
	// What the volume was given last may not be known: leave a wide gap, so that no sequence is given twice.
	w.next = max(w.next, w.mark.at.Sequence+1, row.LastSequence+1) + sequenceGap
	return w.begin(s.number + 1)
}

// sequenceGap is far more than one commit ever takes.
const sequenceGap = 1 << 16

// CloseVolume ends the open volume and returns its number once it is closed, with checksums and filter: from then on its files do not change
// and can be copied. An empty volume is left open, and the number is 0.
func (w *Writer) CloseVolume(ctx context.Context) (uint64, error) {
	// By a channel, not by variables: when ctx ends first, the request still runs later.
	begun := make(chan job, 1)
	err := w.ask(ctx, func() error {
		if w.failure != nil {
			return fmt.Errorf("%w: %w", ErrStorageFailed, w.failure)
		}
		old := w.shelf.current()
		if old.volume.Info().Records == 0 {
			return nil
		}
		if err := w.begin(old.number + 1); err != nil {
			return err
		}
		begun <- w.sealer.add(old)
		return nil
	})
	if err != nil || len(begun) == 0 {
		return 0, err
	}
	closing := <-begun
	select {
	case err := <-closing.done:
		return closing.volume.number, err
	case <-ctx.Done():
		return closing.volume.number, ctx.Err()
	}
}

// Reopen ends the state after ErrStorageFailed: the open volume and the mark are read anew from the disk, and the volume is verified as a
// whole. When something is wrong, the state stays, and the error says what.
func (w *Writer) Reopen(ctx context.Context) error {
	return w.ask(ctx, func() error {
		current := w.shelf.current()
		if err := current.volume.Reopen(); err != nil {
			return err
		}
		report, err := current.volume.Verify(ctx)
		if err = errors.Join(err, report.Err()); err != nil {
			return err
		}
		if err := w.reopenMark(current); err != nil {
			return err
		}
		w.failure = nil
		w.mu.Lock()
		w.failed = nil
		w.mu.Unlock()
		w.options.Logger.Info("storage_reopened", slog.Uint64("volume", current.number))
		return nil
	})
}

// reopenMark reads the mark again, holds the open volume against it, and moves it up to what was found on disk.
func (w *Writer) reopenMark(current *shelved) error {
	// The old handle may have failed to sync; closing it can tell nothing new.
	_ = w.mark.close()
	m, err := openMark(w.options.Files, w.mark.path, w.catalogue.StoreID())
	if err != nil {
		return err
	}
	w.mark = m
	return w.catchUp(current)
}

// catchUp holds the open volume against the mark, and then moves the mark to the volume's last entry: a crash, or a failed sync of the mark,
// leaves entries on disk that were not acknowledged.
func (w *Writer) catchUp(current *shelved) error {
	info := current.volume.Info()
	if at := w.mark.at; at.Volume == info.Number && info.LastSequence < at.Sequence {
		return lostCommit(info.Number, info.LastSequence, at.Sequence)
	}
	w.next = max(w.next, w.mark.at.Sequence+1, current.volume.NextSequence())
	if info.LastSequence > w.mark.at.Sequence {
		if err := w.mark.move(position{info.Number, info.LastSequence}); err != nil {
			return err
		}
	}
	w.publish()
	return nil
}

// ask runs a request in the recording goroutine, after what is waiting already.
func (w *Writer) ask(ctx context.Context, request func() error) error {
	item := &waiting{ctx: ctx, answer: make(chan answer, 1), request: request}
	if err := w.queue.put(ctx, item); err != nil {
		return err
	}
	_, err := item.wait(ctx)
	return err
}
