package volume

import (
	"bytes"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/pagefile"
	"example.com/admit/storage/volume/tree"
)

// The filter of a closed volume says of a term "not here" or "perhaps here", reading at most 64 bytes: first by the lowest and highest
// value of each name (ids that begin with their time fall outside almost every volume), then by a Bloom filter in blocks, each with a CRC
// of its own, so that a flipped bit cannot turn "perhaps" into "no". doc.go draws the file.
const (
	filterMagic   = "admit filter  1\n"
	filterBlock   = 64
	filterBits    = (filterBlock - 4) * 8
	bitsPerTerm   = 16
	probesPerTerm = 8
	maxFiltered   = 8  // names in one filter
	boundLength   = 64 // bytes kept of the lowest and highest value
)

// bounds is the span of the values of one term name, cut to boundLength bytes.
type bounds struct {
	name, low, high []byte
	any             bool // there is at least one value
}

// Filter is the filter of a closed volume. A Volume uses its own; alone it still tells what a volume too damaged to open cannot have held.
type Filter struct {
	path   string
	file   disk.File
	number uint64
	id     [16]byte
	blocks uint64
	names  []bounds
}

// termHash picks a block and the bits in it. A cryptographic hash costs a tenth of a microsecond and leaves nothing to chance or malice.
func termHash(t Term) [sha256.Size]byte {
	return sha256.Sum256(termPrefix(t.Name, t.Value))
}

func probe(hash [sha256.Size]byte, blocks uint64) (block uint64, bits [probesPerTerm]int) {
	block = binary.BigEndian.Uint64(hash[:]) % blocks
	for i := range bits {
		bits[i] = int(binary.BigEndian.Uint16(hash[8+2*i:])) % filterBits
	}
	return block, bits
}

func cut(value []byte) []byte { return value[:min(len(value), boundLength)] }

// collectTerms reads all values of the filtered names from the index.
func collectTerms(source viewer, names [][]byte) ([]bounds, [][sha256.Size]byte, error) {
	var spans []bounds
	var hashes [][sha256.Size]byte
	for _, name := range names {
		span := bounds{name: name}
		prefix := appendEscaped(nil, name)
		from, last := prefix, []byte(nil)
		for done := false; !done; {
			count := 0
			err := source.View(func(r *tree.Reader) error {
				within := func(key []byte) bool { return bytes.HasPrefix(key, prefix) }
				return pagefile.Walk(r, bucketTerms, from, Ascending, within, func(key, _ []byte) (bool, error) {
					term, _, err := parseTermKey(key)
					if err != nil {
						return false, err
					}
					// Equal values are neighbours.
					if !span.any || !bytes.Equal(last, term.Value) {
						hashes = append(hashes, termHash(term))
					}
					if !span.any {
						span.low, span.any = cut(term.Value), true
					}
					last = term.Value
					from = append(bytes.Clone(key), 0)
					count++
					return count < MaxPage, nil
				})
			})
			if err != nil {
				return nil, nil, err
			}
			done = count < MaxPage
		}
		span.high = cut(last)
		spans = append(spans, span)
	}
	return spans, hashes, nil
}

// writeFilter puts the filter of a volume in place.
func writeFilter(files disk.FileSystem, path string, who identity, source viewer, names [][]byte) error {
	if len(names) > maxFiltered {
		return invalid("a filter over %d term names, allowed are %d", len(names), maxFiltered)
	}
	spans, hashes, err := collectTerms(source, names)
	if err != nil {
		return err
	}
	blocks := (uint64(len(hashes))*bitsPerTerm + filterBits - 1) / filterBits
	blocks = max(blocks, 1)
	body := make([]byte, blocks*filterBlock)
	for _, hash := range hashes {
		block, bits := probe(hash, blocks)
		for _, bit := range bits {
			body[block*filterBlock+uint64(bit/8)] |= 1 << (bit % 8)
		}
	}
	for i := range blocks {
		block := body[i*filterBlock : (i+1)*filterBlock]
		binary.BigEndian.PutUint32(block[filterBlock-4:], blockSum(i+1, block))
	}
	header := make([]byte, blockSize)
	b := append(header[:0], filterMagic...)
	b = binary.BigEndian.AppendUint64(b, who.number)
	b = append(b, who.id[:]...)
	b = binary.BigEndian.AppendUint64(b, blocks)
	b = binary.AppendUvarint(b, uint64(len(spans)))
	for _, s := range spans {
		b = appendBytes(b, s.name)
		if s.any {
			b = appendBytes(appendBytes(append(b, 1), s.low), s.high)
		} else {
			b = append(b, 0)
		}
	}
	sealBlock(0, header)
	return disk.Replace(files, path, func(w io.Writer) error {
		if _, err := w.Write(header); err != nil {
			return err
		}
		_, err := w.Write(body)
		return err
	})
}

// OpenFilter opens the filter in a volume's folder.
func OpenFilter(folder string, options Options) (*Filter, error) {
	return openFilter(options.withDefaults().Files, filepath.Join(folder, filterName))
}

// VolumeID returns the id of the volume the filter belongs to.
func (f *Filter) VolumeID() [16]byte { return f.id }

func openFilter(files disk.FileSystem, path string) (*Filter, error) {
	file, err := files.OpenFile(path, os.O_RDONLY, 0)
	if err != nil {
		return nil, err
	}
	f := &Filter{path: path, file: file}
	if err := f.readHeader(); err != nil {
		return nil, joinClose(damage.Locate(err, 0, path), file)
	}
	return f, nil
}

func joinClose(err error, file disk.File) error { return errors.Join(err, file.Close()) }

func (f *Filter) readHeader() error {
	header := make([]byte, blockSize)
	if n, err := f.file.ReadAt(header, 0); n < blockSize {
		return &damage.Error{File: f.path, Problem: "the header is cut off", Cause: err}
	}
	if blockSum(0, header) != binary.BigEndian.Uint32(header[blockContent:]) {
		return damage.InFile(f.path, "the header is damaged")
	}
	d := decoder{rest: header[:blockContent]}
	if string(d.take(uint64(len(filterMagic)))) != filterMagic {
		return damage.InFile(f.path, "not a filter")
	}
	f.number = d.uint64()
	copy(f.id[:], d.take(uint64(len(f.id))))
	f.blocks = d.uint64()
	for range d.count(maxFiltered) {
		span := bounds{name: d.bytes()}
		if flag := d.take(1); len(flag) == 1 && flag[0] == 1 {
			span.any, span.low, span.high = true, d.bytes(), d.bytes()
		}
		f.names = append(f.names, span)
	}
	size, err := f.file.Size()
	if err != nil {
		return err
	}
	if d.failed || f.blocks == 0 || uint64(size) != blockSize+f.blocks*filterBlock {
		return damage.InFile(f.path, "the header does not describe a file of %d bytes", size)
	}
	return nil
}

// MayHold says whether the volume can carry the term; false is certain. Terms of names that are not filtered may always be there.
func (f *Filter) MayHold(t Term) (bool, error) {
	for _, span := range f.names {
		if !bytes.Equal(span.name, t.Name) {
			continue
		}
		value := cut(t.Value)
		if !span.any || bytes.Compare(value, span.low) < 0 || bytes.Compare(value, span.high) > 0 {
			return false, nil
		}
		block, bits := probe(termHash(t), f.blocks)
		content, err := f.readBlock(block)
		if err != nil {
			return true, err
		}
		for _, bit := range bits {
			if content[bit/8]&(1<<(bit%8)) == 0 {
				return false, nil
			}
		}
	}
	return true, nil
}

func (f *Filter) readBlock(number uint64) ([]byte, error) {
	block := make([]byte, filterBlock)
	if n, err := f.file.ReadAt(block, int64(blockSize+number*filterBlock)); n < filterBlock {
		return nil, &damage.Error{File: f.path, Problem: fmt.Sprintf("block %d is cut off", number), Cause: err}
	}
	if blockSum(number+1, block) != binary.BigEndian.Uint32(block[filterBlock-4:]) {
		return nil, damage.InFile(f.path, "block %d is damaged", number)
	}
	return block, nil
}

// verify reads every block.
func (f *Filter) verify() []error {
	var found []error
	for i := range f.blocks {
		if _, err := f.readBlock(i); err != nil {
			found = append(found, err)
		}
	}
	return found
}

// Close releases the file.
func (f *Filter) Close() error { return f.file.Close() }

// MayHold says whether the volume can carry a term; false is certain. In a closed volume this costs one small read at most and is meant to
// be asked of hundreds of volumes; in others, and where the filter is missing or damaged, the answer is true: look it up.
func (v *Volume) MayHold(t Term) bool {
	v.life.RLock()
	defer v.life.RUnlock()
	if v.filter == nil {
		return true
	}
	may, err := v.filter.MayHold(t)
	return may || err != nil
}
