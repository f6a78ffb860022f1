package pagefile

import (
	"os"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/tree"
)

// PageCheck knows more about pages than their structure tells, and refuses those that are not what they were.
type PageCheck interface {
	// CheckPages judges the pages from id on that are in buf.
	CheckPages(id uint64, buf []byte) error
}

// Still is a file that nobody writes.
type Still struct {
	path  string
	meta  tree.Meta
	check PageCheck
}

// Freeze ends writing: after the Views that run it closes the file, cuts off what was reserved but never used, and syncs.
func (f *File) Freeze() (*Still, error) {
	if err := f.usable(); err != nil {
		return nil, err
	}
	if err := f.Close(); err != nil {
		return nil, err
	}
	file, err := os.OpenFile(f.path, os.O_RDWR, 0)
	if err != nil {
		return nil, err
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		return nil, err
	}
	meta, err := tree.ReadMeta(file, info.Size())
	if err != nil {
		return nil, damage.Locate(err, 0, f.path)
	}
	if err := file.Truncate(meta.Bytes()); err != nil {
		return nil, err
	}
	if err := file.Sync(); err != nil {
		return nil, err
	}
	return &Still{path: f.path, meta: meta}, nil
}

// OpenStill reads the meta pages of a file that nobody writes. With a check every page is judged by it, the meta pages first; without, the
// structure of the file is checked as a whole here.
func OpenStill(path string, check PageCheck) (*Still, error) {
	if check == nil {
		meta, err := Check(path)
		if err != nil {
			return nil, err
		}
		return &Still{path: path, meta: meta}, nil
	}
	file, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		return nil, err
	}
	source := checkedSource{tree.FileSource{File: file}, check}
	if err := source.ReadPages(0, make([]byte, 2*tree.PageSize)); err != nil {
		return nil, damage.Locate(err, 0, path)
	}
	meta, err := tree.ReadMeta(file, info.Size())
	if err != nil {
		return nil, damage.Locate(err, 0, path)
	}
	return &Still{path: path, meta: meta, check: check}, nil
}

// Guarded returns the same file with every page judged by check from now on.
func (s *Still) Guarded(check PageCheck) *Still {
	return &Still{path: s.path, meta: s.meta, check: check}
}

// Path returns where the file is.
func (s *Still) Path() string { return s.path }

// Bytes returns the length of the part in use; after Freeze that is the length of the file.
func (s *Still) Bytes() int64 { return s.meta.Bytes() }

// View runs read with a reader of the file.
func (s *Still) View(read func(*tree.Reader) error) error {
	file, err := os.Open(s.path)
	if err != nil {
		return err
	}
	defer file.Close()
	var source tree.Source = tree.FileSource{File: file}
	if s.check != nil {
		source = checkedSource{source, s.check}
	}
	return damage.Locate(read(tree.NewReader(source, s.meta.Root, s.meta.HighWater)), 0, s.path)
}

type checkedSource struct {
	tree.Source
	check PageCheck
}

func (s checkedSource) ReadPages(id uint64, buf []byte) error {
	if err := s.Source.ReadPages(id, buf); err != nil {
		return err
	}
	return s.check.CheckPages(id, buf)
}
