package volume

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// maxFindings bounds a report. A volume with more is not understood better by a longer list.
const maxFindings = 1000

// Report is what Verify found.
type Report struct {
	Pages    uint64 // pages held against their checksum (closed volumes)
	Records  uint64 // values checked, by kind (open and retired volumes)
	Terms    uint64
	Counters uint64
	Objects  uint64
	Samples  uint64
	Orphans  uint64  // sample blocks whose record was never committed: harmless
	Findings []error // what is damaged, each a *damage.Error naming file and bucket and key, or page
}

// Err joins the findings; nil when there are none.
func (r Report) Err() error { return errors.Join(r.Findings...) }

func (r *Report) add(err error) {
	if err != nil && len(r.Findings) < maxFindings {
		r.Findings = append(r.Findings, err)
	}
}

// Verify reads everything. In a closed volume every page of both files, the checksums themselves and the filter are checked: any changed bit
// is found. In other volumes every value is read through its envelope, and the parts are held against each other: each record's index
// entries, objects and samples are there, the index holds nothing else, the counters are the sums of the deltas. It works in short
// transactions, beside the writer. The error is for what kept it from reading; damage is in the report.
func (v *Volume) Verify(ctx context.Context) (Report, error) {
	v.life.RLock()
	stage, kept := v.stage, v.samples != nil
	v.life.RUnlock()
	report := Report{}
	var err error
	if stage == Closed {
		err = v.verifyClosed(ctx, &report, kept)
	} else {
		if stage == Retired {
			v.verifyStructure(&report)
		}
		check := verifier{volume: v, report: &report, written: stage == Open}
		err = check.run(ctx)
	}
	for i, finding := range report.Findings {
		report.Findings[i] = v.located(finding)
	}
	return report, err
}

func (v *Volume) verifyStructure(report *Report) {
	for _, name := range []string{recordsName, samplesName} {
		path := filepath.Join(v.folder, name)
		if _, err := pagefile.Check(path); err != nil {
			report.add(missing(err, path))
		}
	}
}

func (v *Volume) verifyClosed(ctx context.Context, report *Report, samplesKept bool) error {
	blocks := 1 + blocksFor(v.sums.recordsPages) + blocksFor(v.sums.samplesPages)
	for i := range blocks {
		if _, err := v.sums.readBlock(i); err != nil {
			report.add(err)
		}
	}
	filterPath := filepath.Join(v.folder, filterName)
	if f, err := openFilter(v.options.Files, filterPath); err != nil {
		report.add(missing(err, filterPath))
	} else {
		if f.id != v.identity.id {
			report.add(damage.InFile(filterPath, "the filter belongs to another volume"))
		}
		for _, finding := range f.verify() {
			report.add(finding)
		}
		if err := f.Close(); err != nil {
			return err
		}
	}
	if err := verifyPages(ctx, filepath.Join(v.folder, recordsName), v.sums.recordsPages, v.sums.records(), report); err != nil {
		return err
	}
	if !samplesKept {
		return nil
	}
	return verifyPages(ctx, filepath.Join(v.folder, samplesName), v.sums.samplesPages, v.sums.samples(), report)
}

// verifyPages holds every page of a file against its checksum.
func verifyPages(ctx context.Context, path string, pages uint64, check pagefile.PageCheck, report *Report) error {
	file, err := os.Open(path)
	if errors.Is(err, os.ErrNotExist) {
		report.add(missing(err, path))
		return nil
	}
	if err != nil {
		return err
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		return err
	}
	if uint64(info.Size()) != pages*tree.PageSize {
		report.add(damage.InFile(path, "%d bytes, %d when it was closed", info.Size(), pages*tree.PageSize))
	}
	buf := make([]byte, 256*tree.PageSize)
	for first := uint64(0); first < pages; first += 256 {
		if err := ctx.Err(); err != nil {
			return err
		}
		n, err := io.ReadFull(file, buf)
		if err != nil && err != io.ErrUnexpectedEOF && err != io.EOF {
			return fmt.Errorf("read %s: %w", path, err)
		}
		for at := 0; at+tree.PageSize <= n; at += tree.PageSize {
			id := first + uint64(at/tree.PageSize)
			report.Pages++
			report.add(damage.Locate(check.CheckPages(id, buf[at:at+tree.PageSize]), 0, path))
		}
	}
	return nil
}
