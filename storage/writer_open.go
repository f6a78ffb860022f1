package storage

import (
	"errors"
	"fmt"
	"log/slog"
	"os"
	"path/filepath"

	"example.com/admit/storage/catalogue"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
)

// OpenWriter opens the store in a folder, or makes one where there is nothing yet, and starts recording. See the package comment for what is
// checked. ErrInUse comes within three seconds. Damage is a *damage.Error; ErrLostCommit matches damage.ErrDamaged as well.
func OpenWriter(options WriterOptions) (*Writer, error) {
	o := options.withDefaults()
	if err := os.MkdirAll(o.Folder, 0o750); err != nil {
		return nil, err
	}
	lock, err := lockFolder(o.Folder)
	if err != nil {
		return nil, err
	}
	w := &Writer{options: o, lock: lock, shelf: &shelf{}, queue: newQueue(o.QueueBytes), changed: make(chan struct{})}
	if err := w.open(); err != nil {
		return nil, errors.Join(err, w.release())
	}
	for _, s := range w.shelf.all() {
		if s != w.shelf.current() && s.volume != nil && s.damaged() == nil && s.volume.Info().Stage == volume.Retired {
			w.sealer.add(s)
		}
	}
	w.group.Go(w.run)
	return w, nil
}

func (w *Writer) open() error {
	if err := w.openCatalogue(); err != nil {
		return err
	}
	w.sealer = newSealer(w.catalogue, w.options)
	rows, err := w.catalogue.Volumes()
	if err != nil {
		return err
	}
	if err := w.openMark(len(rows) == 0); err != nil {
		return err
	}
	if err := w.openVolumes(rows); err != nil {
		return err
	}
	return w.catchUp(w.shelf.current())
}

// openCatalogue opens the catalogue, or makes it when the folder holds nothing of a store: a catalogue that is gone is not the same as one
// that never was.
func (w *Writer) openCatalogue() (err error) {
	folder := w.options.Folder
	path := filepath.Join(folder, catalogue.FileName)
	if _, statErr := os.Lstat(path); !errors.Is(statErr, os.ErrNotExist) {
		w.catalogue, err = catalogue.Open(folder, w.options.catalogue())
		return err
	}
	numbers, err := volumeFolders(folder)
	if err != nil {
		return err
	}
	if _, statErr := os.Lstat(filepath.Join(folder, markName)); len(numbers) > 0 || !errors.Is(statErr, os.ErrNotExist) {
		return &damage.Error{File: path, Problem: "the catalogue is missing, but other files of the store are there", Cause: os.ErrNotExist}
	}
	w.catalogue, err = catalogue.Create(folder, w.options.catalogue())
	return err
}

// openMark opens the mark, or makes it while the store has no volume yet.
func (w *Writer) openMark(fresh bool) (err error) {
	path := filepath.Join(w.options.Folder, markName)
	if _, statErr := os.Lstat(path); fresh && errors.Is(statErr, os.ErrNotExist) {
		if err := createMark(w.options.Files, path, w.catalogue.StoreID()); err != nil {
			return err
		}
	}
	w.mark, err = openMark(w.options.Files, path, w.catalogue.StoreID())
	if err == nil && fresh && w.mark.at != (position{}) {
		err = damage.InFile(path, "entries up to %d were acknowledged, but the manifest knows no volume", w.mark.at.Sequence)
	}
	return err
}

// openVolumes opens what the manifest names, and begins the first volume, or the next after one set aside.
func (w *Writer) openVolumes(rows []volume.Info) error {
	rows, err := w.adopt(rows)
	if err != nil {
		return err
	}
	if len(rows) == 0 {
		return w.begin(1)
	}
	for i, row := range rows {
		if row.Number != uint64(i)+1 {
			return &damage.Error{File: w.catalogue.Path(), Problem: fmt.Sprintf("the manifest lacks volume %d", i+1)}
		}
	}
	newest := rows[len(rows)-1]
	if w.mark.at.Volume > newest.Number {
		return fmt.Errorf("%w: %w", ErrLostCommit, &damage.Error{Volume: w.mark.at.Volume,
			Problem: fmt.Sprintf("entries up to %d were acknowledged in it, but the manifest ends with volume %d", w.mark.at.Sequence, newest.Number)})
	}
	for _, row := range rows[:len(rows)-1] {
		s, err := w.openFinished(row)
		if err != nil {
			return err
		}
		w.shelf.add(s)
		w.next = max(w.next, s.info().LastSequence+1)
	}
	return w.openNewest(newest)
}

// openNewest opens the volume that is being written.
func (w *Writer) openNewest(row volume.Info) error {
	folder := filepath.Join(w.options.Folder, volume.FolderName(row.Number))
	if row.Stage == volume.Open {
		v, err := volume.OpenForWriting(folder, w.options.volume())
		if err == nil {
			if err = matches(v.Info(), row); err == nil && w.mark.at.Volume == row.Number && v.Info().LastSequence < w.mark.at.Sequence {
				err = lostCommit(row.Number, v.Info().LastSequence, w.mark.at.Sequence)
			}
			if err == nil {
				w.shelf.add(&shelved{number: row.Number, volume: v, row: row})
				return nil
			}
			err = errors.Join(err, v.Close())
		}
		err = damage.Locate(err, row.Number, folder)
		if !w.options.SetAsideDamaged || !errors.Is(err, damage.ErrDamaged) {
			return err
		}
		s := w.unreadable(row, err)
		w.shelf.add(s)
		return w.setAside(s, err)
	}
	// The newest volume is not open: setting it aside was interrupted before the next one began.
	s, err := w.openFinished(row)
	if err != nil {
		return err
	}
	w.shelf.add(s)
	w.next = max(w.next, w.mark.at.Sequence+1, s.info().LastSequence+1) + sequenceGap
	return w.begin(row.Number + 1)
}

// openFinished opens a volume that is no longer written. Damage to a closed one, or one set aside, is noted with it; damage to one that was not
// closed yet is an error, unless volumes may be set aside.
func (w *Writer) openFinished(row volume.Info) (*shelved, error) {
	folder := filepath.Join(w.options.Folder, volume.FolderName(row.Number))
	v, err := volume.OpenForReading(folder, w.options.volume())
	if err == nil {
		if err = w.compare(v, row); err == nil {
			s := &shelved{number: row.Number, volume: v, row: row}
			if row.Stage == volume.SetAside {
				s.damage = damage.InFile(folder, "the volume was set aside because of damage")
			}
			return s, nil
		}
		err = errors.Join(err, v.Close())
	}
	if !errors.Is(err, damage.ErrDamaged) {
		return nil, err
	}
	err = damage.Locate(err, row.Number, folder)
	contained := row.Stage == volume.Closed || row.Stage == volume.SetAside
	if !contained && !w.options.SetAsideDamaged {
		return nil, err
	}
	if !contained {
		row.Stage = volume.SetAside
		if err := w.catalogue.PutVolume(row); err != nil {
			return nil, err
		}
	}
	w.options.Logger.Error("volume_damaged", slog.Uint64("volume", row.Number), slog.String("error", err.Error()))
	return w.unreadable(row, err), nil
}

// unreadable shelves a damaged volume with as much of it as can be used: all of it, if it opens for reading, or its filter.
func (w *Writer) unreadable(row volume.Info, cause error) *shelved {
	s := &shelved{number: row.Number, row: row, damage: cause}
	folder := filepath.Join(w.options.Folder, volume.FolderName(row.Number))
	if row.Stage != volume.Closed {
		if v, err := volume.OpenForReading(folder, w.options.volume()); err == nil {
			s.volume = v
			return s
		}
	}
	if f, err := volume.OpenFilter(folder, w.options.volume()); err == nil {
		if f.VolumeID() == row.ID {
			s.filter = f
		} else {
			// A filter of another volume would deny ids that are here.
			_ = f.Close()
		}
	}
	return s
}

// compare holds a finished volume against its row and the mark.
func (w *Writer) compare(v *volume.Volume, row volume.Info) error {
	found := v.Info()
	if err := matches(found, row); err != nil {
		return err
	}
	if at := w.mark.at; at.Volume == found.Number && found.LastSequence < at.Sequence {
		return lostCommit(found.Number, found.LastSequence, at.Sequence)
	}
	if row.Stage != volume.Closed && found.Stage == volume.Closed {
		// It was closed, but a crash came before the manifest said so.
		return w.catalogue.PutVolume(found)
	}
	return nil
}

// matches compares what a volume is with what the manifest says.
func matches(found, row volume.Info) error {
	different := func(format string, args ...any) error {
		return &damage.Error{Volume: row.Number, Problem: "differs from the manifest: " + fmt.Sprintf(format, args...)}
	}
	switch {
	case found.Number != row.Number || found.ID != row.ID:
		return different("it is volume %d (%x), expected %d (%x)", found.Number, found.ID, row.Number, row.ID)
	case row.Stage != volume.Closed:
		return nil
	case found.Stage != volume.Closed:
		return different("its checksums are missing")
	case found.Records != row.Records || found.FirstSequence != row.FirstSequence || found.LastSequence != row.LastSequence:
		return different("%d records %d..%d, expected %d records %d..%d", found.Records, found.FirstSequence, found.LastSequence,
			row.Records, row.FirstSequence, row.LastSequence)
	case found.RecordsBytes != row.RecordsBytes:
		return different("its records have %d bytes, expected %d", found.RecordsBytes, row.RecordsBytes)
	case row.SamplesKept && !found.SamplesKept:
		return different("its samples are missing")
	case row.SamplesKept && found.SamplesBytes != row.SamplesBytes:
		return different("its samples have %d bytes, expected %d", found.SamplesBytes, row.SamplesBytes)
	}
	return nil
}

func lostCommit(number, have, want uint64) error {
	return fmt.Errorf("%w: %w", ErrLostCommit, &damage.Error{Volume: number,
		Problem: fmt.Sprintf("it ends with entry %d, but entries up to %d were acknowledged", have, want)})
}
