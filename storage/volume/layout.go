package volume

import (
	"bytes"
	"encoding/binary"
	"fmt"

	"example.com/admit/storage/volume/damage"
)

// Names of the files and buckets of a volume; doc.go draws them.
const (
	recordsName = "records.db"
	samplesName = "samples.db"
	sumsName    = "pages.crc"
	filterName  = "terms.filter"

	bucketMeta     = "meta"
	bucketRecords  = "records"
	bucketTerms    = "terms"
	bucketCounters = "counters"
	bucketObjects  = "objects"
	bucketSamples  = "samples"

	keyVolume = "volume"
	keyState  = "state"
)

// FolderName returns the name of a volume's folder within its store.
func FolderName(number uint64) string { return fmt.Sprintf("volume-%08d", number) }

func recordKey(sequence uint64) []byte { return binary.BigEndian.AppendUint64(nil, sequence) }

func sampleKey(sequence uint64, index uint32) []byte {
	return binary.BigEndian.AppendUint32(recordKey(sequence), index)
}

func objectKey(kind string, hash [32]byte) []byte {
	key := make([]byte, 0, 1+len(kind)+len(hash))
	key = append(key, byte(len(kind)))
	key = append(key, kind...)
	return append(key, hash[:]...)
}

// appendEscaped appends part so that the order of escaped parts followed by anything is the order of the parts: a zero byte becomes 00 ff,
// and 00 01 ends the part.
func appendEscaped(dst, part []byte) []byte {
	for {
		at := bytes.IndexByte(part, 0)
		if at < 0 {
			dst = append(dst, part...)
			return append(dst, 0, 1)
		}
		dst = append(dst, part[:at]...)
		dst = append(dst, 0, 0xff)
		part = part[at+1:]
	}
}

// cutEscaped takes one escaped part off the front.
func cutEscaped(b []byte) (part, rest []byte, ok bool) {
	for {
		at := bytes.IndexByte(b, 0)
		if at < 0 || at+1 >= len(b) {
			return nil, nil, false
		}
		part = append(part, b[:at]...)
		switch b[at+1] {
		case 1:
			return part, b[at+2:], true
		case 0xff:
			part = append(part, 0)
			b = b[at+2:]
		default:
			return nil, nil, false
		}
	}
}

// termPrefix is what all index keys of a term begin with.
func termPrefix(name, value []byte) []byte {
	return appendEscaped(appendEscaped(nil, name), value)
}

func termKey(t Term, sequence uint64) []byte {
	return binary.BigEndian.AppendUint64(termPrefix(t.Name, t.Value), sequence)
}

// parseTermKey is the inverse of termKey.
func parseTermKey(key []byte) (Term, uint64, error) {
	name, rest, okName := cutEscaped(key)
	value, rest, okValue := cutEscaped(rest)
	if !okName || !okValue || len(rest) != 8 {
		return Term{}, 0, &damage.Error{Bucket: bucketTerms, Key: key, Problem: "not an index key"}
	}
	return Term{Name: name, Value: value}, binary.BigEndian.Uint64(rest), nil
}
