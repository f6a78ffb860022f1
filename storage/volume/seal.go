package volume

import (
	"context"
	"fmt"
	"path/filepath"

	"example.com/admit/storage/volume/pagefile"
)

// Seal closes a retired volume: it verifies every value first, so that damage is not sealed in as if it were sound, then writes the
// filter over the given term names and the checksum of every page. From then on each page is held against its checksum whenever it is
// read. Readers go on undisturbed meanwhile. Sealing a closed volume does nothing.
func (v *Volume) Seal(ctx context.Context, filtered ...[]byte) error {
	v.life.RLock()
	stage := v.stage
	v.life.RUnlock()
	switch stage {
	case Closed:
		return nil
	case Open:
		return fmt.Errorf("volume %d is still open: %w", v.identity.number, ErrNotOpen)
	}
	report, err := v.Verify(ctx)
	if err != nil {
		return err
	}
	if err := report.Err(); err != nil {
		return fmt.Errorf("volume %d is not sealed: %w", v.identity.number, err)
	}
	return v.located(v.seal(filtered))
}

func (v *Volume) seal(names [][]byte) error {
	filterPath := filepath.Join(v.folder, filterName)
	if err := writeFilter(v.options.Files, filterPath, v.identity, v.records, names); err != nil {
		return err
	}
	// The checksums come last: their file is what makes the volume a closed one.
	if err := writeSums(v.options.Files, v.folder, v.identity); err != nil {
		return err
	}
	s, err := openSums(v.options.Files, filepath.Join(v.folder, sumsName))
	if err != nil {
		return err
	}
	f, err := openFilter(v.options.Files, filterPath)
	if err != nil {
		return joinClose(err, s.file)
	}
	v.life.Lock()
	defer v.life.Unlock()
	v.records, v.samples = guarded(v.records, s.records()), guarded(v.samples, s.samples())
	v.sums, v.filter, v.stage = s, f, Closed
	return nil
}

// guarded puts a still file under page checksums.
func guarded(side viewer, check pagefile.PageCheck) viewer {
	if still, ok := side.(*pagefile.Still); ok {
		return still.Guarded(check)
	}
	return side
}
