package volume

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// OpenForWriting opens a volume that is being written. Both files are checked as a whole first, and against each other; what is wrong is
// a *damage.Error, a missing file matches os.ErrNotExist as well, and no file is changed.
func OpenForWriting(folder string, options Options) (*Volume, error) {
	o := options.withDefaults()
	if _, err := os.Lstat(filepath.Join(folder, sumsName)); err == nil {
		return nil, fmt.Errorf("%s is closed: %w", folder, ErrNotOpen)
	}
	records, err := pagefile.Open(filepath.Join(folder, recordsName), o.pagefile())
	if err != nil {
		return nil, missing(err, filepath.Join(folder, recordsName))
	}
	samples, err := pagefile.Open(filepath.Join(folder, samplesName), o.pagefile())
	if err != nil {
		return nil, errors.Join(missing(err, filepath.Join(folder, samplesName)), records.Close())
	}
	v := &Volume{folder: folder, options: o, stage: Open, records: records, samples: samples, openedAt: o.Clock()}
	if err := v.load(); err != nil {
		return nil, errors.Join(err, v.Close())
	}
	return v, nil
}

// OpenForReading opens a volume that nobody writes: a closed one, with every page held against its checksum whenever it is read, or one
// that was retired but not yet closed, which is checked as a whole now. In a closed volume the samples file may be absent.
func OpenForReading(folder string, options Options) (*Volume, error) {
	o := options.withDefaults()
	v := &Volume{folder: folder, options: o, stage: Retired}
	if _, err := os.Lstat(filepath.Join(folder, sumsName)); err == nil {
		v.stage = Closed
		if v.sums, err = openSums(o.Files, filepath.Join(folder, sumsName)); err != nil {
			return nil, err
		}
		// A filter that cannot be used costs time, not truth: look-ups then read the volume itself. Verify reports it.
		v.filter, _ = openFilter(o.Files, filepath.Join(folder, filterName))
	} else if !errors.Is(err, os.ErrNotExist) {
		return nil, err
	}
	if err := v.openStill(); err != nil {
		return nil, errors.Join(err, v.Close())
	}
	if err := v.load(); err != nil {
		return nil, errors.Join(err, v.Close())
	}
	if v.sums != nil && v.sums.id != v.identity.id {
		err := damage.InFile(v.sums.path, "the checksums belong to another volume")
		return nil, errors.Join(v.located(err), v.Close())
	}
	if v.filter != nil && v.filter.id != v.identity.id {
		v.filter.Close()
		v.filter = nil
	}
	return v, nil
}

func (v *Volume) openStill() error {
	open := func(name string, check pagefile.PageCheck) (*pagefile.Still, error) {
		still, err := pagefile.OpenStill(filepath.Join(v.folder, name), check)
		return still, missing(err, filepath.Join(v.folder, name))
	}
	var recordsCheck, samplesCheck pagefile.PageCheck
	if v.sums != nil {
		recordsCheck, samplesCheck = v.sums.records(), v.sums.samples()
	}
	records, err := open(recordsName, recordsCheck)
	if err != nil {
		return err
	}
	v.records = records
	samples, err := open(samplesName, samplesCheck)
	switch {
	case err == nil:
		v.samples = samples
	case v.stage == Closed && errors.Is(err, os.ErrNotExist):
		// Retention drops samples of closed volumes only. Whether it did is for the manifest to say.
	default:
		return err
	}
	return nil
}

// missing turns the absence of a file into a damage that still matches os.ErrNotExist.
func missing(err error, path string) error {
	if errors.Is(err, os.ErrNotExist) {
		return &damage.Error{File: path, Problem: "the file is missing", Cause: os.ErrNotExist}
	}
	return err
}

// load reads identity and state, and holds the two files against each other.
func (v *Volume) load() error {
	var last uint64
	var facts state
	var who identity
	err := v.records.View(func(r *tree.Reader) (err error) {
		if who, err = readIdentity(r); err != nil {
			return err
		}
		if facts, err = readState(r); err != nil {
			return err
		}
		last, err = lastSequence(r, bucketRecords)
		return err
	})
	if err != nil {
		return damage.Locate(err, who.number, "")
	}
	v.identity = who
	if last != facts.lastSequence {
		return v.located(damage.InFile(filepath.Join(v.folder, recordsName),
			"the last record has sequence %d, the volume counts up to %d", last, facts.lastSequence))
	}
	samplesLast := facts.lastSampled
	if v.samples != nil {
		if samplesLast, err = v.loadSamples(facts); err != nil {
			return v.located(err)
		}
	}
	v.mu.Lock()
	defer v.mu.Unlock()
	v.state, v.samplesLast, v.revision = facts, samplesLast, 0
	v.revisions, v.objects = make(map[uint64]string), make(map[ObjectRef]bool)
	return nil
}

func (v *Volume) loadSamples(facts state) (last uint64, err error) {
	path := filepath.Join(v.folder, samplesName)
	err = v.samples.View(func(r *tree.Reader) error {
		who, err := readIdentity(r)
		if err != nil {
			return err
		}
		if who != v.identity {
			return damage.InFile(path, "the samples belong to volume %d (%x), the records to volume %d (%x)",
				who.number, who.id, v.identity.number, v.identity.id)
		}
		last, err = lastSequence(r, bucketSamples)
		return err
	})
	if err != nil {
		return 0, err
	}
	if last < facts.lastSampled {
		return 0, damage.InFile(path, "the last samples have sequence %d, but record %d has samples: commits are lost", last, facts.lastSampled)
	}
	return last, nil
}

// Reopen closes the files of an open volume after a failure, drops what the system remembers of them, and opens and verifies them anew:
// after a failed sync, memory may hold what the disk does not. Until it succeeds nothing can be appended.
func (v *Volume) Reopen() error {
	v.life.Lock()
	defer v.life.Unlock()
	if v.stage != Open {
		return fmt.Errorf("volume %d is %s: %w", v.identity.number, v.stage, ErrNotOpen)
	}
	// A close that fails leaves nothing worse than before; opening decides.
	_ = v.closeFiles()
	for _, name := range []string{samplesName, recordsName} {
		if err := forget(filepath.Join(v.folder, name)); err != nil {
			return v.located(err)
		}
	}
	fresh, err := OpenForWriting(v.folder, v.options)
	if err != nil {
		return v.located(err)
	}
	v.mu.Lock()
	defer v.mu.Unlock()
	v.records, v.samples, v.openedAt = fresh.records, fresh.samples, fresh.openedAt
	v.state, v.samplesLast, v.revision = fresh.state, fresh.samplesLast, 0
	v.revisions, v.objects = fresh.revisions, fresh.objects
	return nil
}

// Close releases files. The volume stays in its stage, ready to be opened again.
func (v *Volume) Close() error {
	v.life.Lock()
	defer v.life.Unlock()
	return v.closeFiles()
}

func (v *Volume) closeFiles() error {
	var errs []error
	for _, side := range []viewer{v.records, v.samples} {
		if file, ok := side.(*pagefile.File); ok {
			errs = append(errs, file.Close())
		}
	}
	if v.sums != nil {
		errs = append(errs, v.sums.close())
	}
	if v.filter != nil {
		errs = append(errs, v.filter.Close())
	}
	return errors.Join(errs...)
}
