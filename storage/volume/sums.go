package volume

import (
	"encoding/binary"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"sync"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/envelope"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// The checksum file is a header block and blocks of checksums, each block with a CRC of its own, so that one checksum can be read and
// trusted without reading the others. doc.go draws it.
const (
	sumsMagic    = "admit page sums\n"
	sumsFormat   = 1
	blockSize    = 4096
	blockContent = blockSize - 4
	sumsPerBlock = blockContent / 4
)

// sums is an open checksum file.
type sums struct {
	path         string
	file         disk.File
	number       uint64
	id           [16]byte
	recordsPages uint64
	samplesPages uint64

	mu     sync.Mutex
	block  uint64 // number of the block in cached, 0 for none: block 0 is the header
	cached []byte
}

// sealBlock puts the checksum of number and content at the end of a block of blockSize bytes. With its number in the sum, a block that
// was moved does not pass.
func sealBlock(number uint64, block []byte) {
	binary.BigEndian.PutUint32(block[blockContent:], blockSum(number, block))
}

func blockSum(number uint64, block []byte) uint32 {
	sum := envelope.Checksum(binary.BigEndian.AppendUint64(nil, number))
	return envelope.Extend(sum, block[:len(block)-4])
}

// blocksFor returns how many blocks hold the checksums of that many pages.
func blocksFor(pages uint64) uint64 { return (pages + sumsPerBlock - 1) / sumsPerBlock }

// writeSums computes the checksums of both files and puts the checksum file in place.
func writeSums(files disk.FileSystem, folder string, who identity) error {
	var sizes [2]uint64
	for i, name := range []string{recordsName, samplesName} {
		info, err := os.Stat(filepath.Join(folder, name))
		if err != nil {
			return missing(err, filepath.Join(folder, name))
		}
		if info.Size()%tree.PageSize != 0 {
			return damage.InFile(filepath.Join(folder, name), "%d bytes are not a whole number of pages", info.Size())
		}
		sizes[i] = uint64(info.Size()) / tree.PageSize
	}
	return disk.Replace(files, filepath.Join(folder, sumsName), func(w io.Writer) error {
		header := make([]byte, blockSize)
		b := append(header[:0], sumsMagic...)
		b = binary.BigEndian.AppendUint32(b, sumsFormat)
		b = binary.BigEndian.AppendUint64(b, who.number)
		b = append(b, who.id[:]...)
		b = binary.BigEndian.AppendUint64(b, sizes[0])
		binary.BigEndian.AppendUint64(b, sizes[1])
		sealBlock(0, header)
		if _, err := w.Write(header); err != nil {
			return err
		}
		next := uint64(1)
		for i, name := range []string{recordsName, samplesName} {
			if err := writeFileSums(w, filepath.Join(folder, name), sizes[i], next); err != nil {
				return err
			}
			next += blocksFor(sizes[i])
		}
		return nil
	})
}

func writeFileSums(w io.Writer, path string, pages, block uint64) error {
	file, err := os.Open(path)
	if err != nil {
		return err
	}
	defer file.Close()
	buf := make([]byte, sumsPerBlock*tree.PageSize)
	for first := uint64(0); first < pages; first += sumsPerBlock {
		n := min(sumsPerBlock, pages-first)
		if _, err := io.ReadFull(file, buf[:n*tree.PageSize]); err != nil {
			return fmt.Errorf("read %s: %w", path, err)
		}
		out := make([]byte, blockSize)
		for i := range n {
			binary.BigEndian.PutUint32(out[4*i:], envelope.Checksum(buf[i*tree.PageSize:(i+1)*tree.PageSize]))
		}
		sealBlock(block, out)
		block++
		if _, err := w.Write(out); err != nil {
			return err
		}
	}
	return nil
}

func openSums(files disk.FileSystem, path string) (*sums, error) {
	file, err := files.OpenFile(path, os.O_RDONLY, 0)
	if err != nil {
		return nil, err
	}
	s := &sums{path: path, file: file}
	if err := s.readHeader(); err != nil {
		return nil, joinClose(damage.Locate(err, s.number, path), file)
	}
	return s, nil
}

func (s *sums) readHeader() error {
	header, err := s.readBlock(0)
	if err != nil {
		return err
	}
	d := decoder{rest: header}
	if string(d.take(uint64(len(sumsMagic)))) != sumsMagic {
		return damage.InFile(s.path, "not a file of page checksums")
	}
	if format := d.uint32(); format != sumsFormat {
		return fmt.Errorf("%s: format %d, this program reads %d: %w", s.path, format, sumsFormat, envelope.ErrNewerSchema)
	}
	s.number = d.uint64()
	copy(s.id[:], d.take(uint64(len(s.id))))
	s.recordsPages, s.samplesPages = d.uint64(), d.uint64()
	size, err := s.file.Size()
	if err != nil {
		return err
	}
	if want := 1 + blocksFor(s.recordsPages) + blocksFor(s.samplesPages); uint64(size) != want*blockSize {
		return damage.InFile(s.path, "%d bytes, should be %d", size, want*blockSize)
	}
	return nil
}

// readBlock reads one block and checks it.
func (s *sums) readBlock(number uint64) ([]byte, error) {
	block := make([]byte, blockSize)
	if n, err := s.file.ReadAt(block, int64(number*blockSize)); n < blockSize {
		return nil, &damage.Error{File: s.path, Problem: fmt.Sprintf("checksum block %d is cut off", number), Cause: err}
	}
	if got, want := blockSum(number, block), binary.BigEndian.Uint32(block[blockContent:]); got != want {
		return nil, damage.InFile(s.path, "checksum block %d is damaged itself", number)
	}
	return block[:blockContent], nil
}

// pageSum returns the checksum of a page given its number counted from block 1 on.
func (s *sums) pageSum(block uint64, at uint64) (uint32, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.block != block || s.cached == nil {
		content, err := s.readBlock(block)
		if err != nil {
			return 0, err
		}
		s.block, s.cached = block, content
	}
	return binary.BigEndian.Uint32(s.cached[4*at:]), nil
}

func (s *sums) records() pagefile.PageCheck {
	return fileSums{sums: s, firstBlock: 1, pages: s.recordsPages}
}

func (s *sums) samples() pagefile.PageCheck {
	return fileSums{sums: s, firstBlock: 1 + blocksFor(s.recordsPages), pages: s.samplesPages}
}

func (s *sums) close() error { return s.file.Close() }

// fileSums are the checksums of one of the two files.
type fileSums struct {
	sums       *sums
	firstBlock uint64
	pages      uint64
}

// CheckPages implements pagefile.PageCheck.
func (f fileSums) CheckPages(id uint64, buf []byte) error {
	for ; len(buf) > 0; id, buf = id+1, buf[tree.PageSize:] {
		if id >= f.pages {
			return damage.OnPage(id, "beyond the %d pages of the closed volume", f.pages)
		}
		want, err := f.sums.pageSum(f.firstBlock+id/sumsPerBlock, id%sumsPerBlock)
		if err != nil {
			return err
		}
		if got := envelope.Checksum(buf[:tree.PageSize]); got != want {
			return damage.OnPage(id, "checksum of the page is %08x, recorded as %08x", got, want)
		}
	}
	return nil
}
