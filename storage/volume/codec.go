package volume

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"

	"github.com/klauspost/compress/zstd"
)

// How an array is stored: the first byte of its encoded form.
const (
	methodRaw64    = 1 // float64, little-endian
	methodXOR64    = 2 // each float64 XOR the one before, bytes shuffled, zstd
	methodRaw32    = 3 // float32, little-endian
	methodShuffled = 4 // float32, bytes shuffled, zstd
)

// ErrNotSamples says that bytes are not an encoded array, or one longer than the caller allows.
var ErrNotSamples = errors.New("not an encoded array of samples")

// Encoder turns arrays of float64 into bytes, bit for bit: NaN payloads and negative zeros come back as they were. Its buffers are reused,
// so it serves one goroutine at a time.
//
// Receivers deliver at most 24 significant bits. Where every value of an array is exactly a float32, four bytes each are stored, which
// halves the size before any compression; noise digits themselves do not compress. Give real and imaginary parts one behind the
// other (planar), not interleaved: neighbours that resemble each other are what both methods live on.
type Encoder struct {
	zstd    *zstd.Encoder
	planes  []byte
	shuffle []byte
}

// Decoder is the inverse of Encoder, for one goroutine at a time.
type Decoder struct {
	zstd    *zstd.Decoder
	planes  []byte
	shuffle []byte
}

// NewEncoder returns an encoder. It starts no goroutine and needs no closing.
func NewEncoder() (*Encoder, error) {
	// The envelope has a checksum of its own, so the frame goes without.
	e, err := zstd.NewWriter(nil, zstd.WithEncoderLevel(zstd.SpeedDefault), zstd.WithEncoderConcurrency(1),
		zstd.WithEncoderCRC(false), zstd.WithWindowSize(1<<20), zstd.WithLowerEncoderMem(true))
	if err != nil {
		return nil, err
	}
	return &Encoder{zstd: e}, nil
}

// NewDecoder returns a decoder. It starts no goroutine and needs no closing.
func NewDecoder() (*Decoder, error) {
	// With the capacity as limit, a frame cannot make the decoder allocate more than the header promised.
	d, err := zstd.NewReader(nil, zstd.WithDecoderConcurrency(1), zstd.WithDecodeAllCapLimit(true), zstd.WithDecoderMaxWindow(1<<20))
	if err != nil {
		return nil, err
	}
	return &Decoder{zstd: d}, nil
}

// Encode appends the encoded form of values to dst: a method byte, the number of values as unsigned varint, and the data.
func (e *Encoder) Encode(dst []byte, values []float64) []byte {
	width, raw, packed := 8, byte(methodRaw64), byte(methodXOR64)
	if allFloat32(values) {
		width, raw, packed = 4, methodRaw32, methodShuffled
	}
	e.planes = grow(e.planes, width*len(values))
	e.shuffle = grow(e.shuffle, width*len(values))
	if width == 4 {
		for i, v := range values {
			binary.LittleEndian.PutUint32(e.planes[4*i:], math.Float32bits(float32(v)))
		}
	} else {
		var before uint64
		for i, v := range values {
			bits := math.Float64bits(v)
			binary.LittleEndian.PutUint64(e.planes[8*i:], bits^before)
			before = bits
		}
	}
	shuffle(e.shuffle, e.planes, width)
	start := len(dst)
	dst = binary.AppendUvarint(append(dst, packed), uint64(len(values)))
	body := len(dst)
	dst = e.zstd.EncodeAll(e.shuffle, dst)
	if len(dst)-body < width*len(values) {
		return dst
	}
	// Compression did not help: store the numbers as they are.
	dst = binary.AppendUvarint(append(dst[:start], raw), uint64(len(values)))
	for _, v := range values {
		if width == 4 {
			dst = binary.LittleEndian.AppendUint32(dst, math.Float32bits(float32(v)))
		} else {
			dst = binary.LittleEndian.AppendUint64(dst, math.Float64bits(v))
		}
	}
	return dst
}

// Decode appends the values of an encoded array to dst. An array of more than limit values is refused before anything is allocated for
// it; what is allocated is bounded by the number of values the array declares.
func (d *Decoder) Decode(dst []float64, encoded []byte, limit int) ([]float64, error) {
	if len(encoded) == 0 {
		return nil, fmt.Errorf("%w: no bytes", ErrNotSamples)
	}
	count, n := binary.Uvarint(encoded[1:])
	if n <= 0 || count > uint64(max(limit, 0)) {
		return nil, fmt.Errorf("%w: %d values, at most %d are allowed", ErrNotSamples, count, limit)
	}
	method, body := encoded[0], encoded[1+n:]
	width := 8
	if method == methodRaw32 || method == methodShuffled {
		width = 4
	}
	size := width * int(count)
	switch method {
	case methodRaw64, methodRaw32:
		if len(body) != size {
			return nil, fmt.Errorf("%w: %d bytes for %d values", ErrNotSamples, len(body), count)
		}
		return appendValues(dst, body, width, false), nil
	case methodXOR64, methodShuffled:
		d.shuffle = grow(d.shuffle, size)
		shuffled, err := d.zstd.DecodeAll(body, d.shuffle[:0:size])
		if err != nil {
			return nil, fmt.Errorf("%w: %w", ErrNotSamples, err)
		}
		if len(shuffled) != size {
			return nil, fmt.Errorf("%w: %d bytes for %d values", ErrNotSamples, len(shuffled), count)
		}
		d.planes = grow(d.planes, size)
		unshuffle(d.planes, shuffled, width)
		return appendValues(dst, d.planes, width, method == methodXOR64), nil
	}
	return nil, fmt.Errorf("%w: method %d", ErrNotSamples, method)
}

// appendValues turns bytes into numbers; chained says that each was stored XOR the one before.
func appendValues(dst []float64, b []byte, width int, chained bool) []float64 {
	var before uint64
	for ; len(b) > 0; b = b[width:] {
		if width == 4 {
			dst = append(dst, float64(math.Float32frombits(binary.LittleEndian.Uint32(b))))
			continue
		}
		bits := binary.LittleEndian.Uint64(b)
		if chained {
			bits ^= before
			before = bits
		}
		dst = append(dst, math.Float64frombits(bits))
	}
	return dst
}

// allFloat32 says whether every value survives as float32 bit for bit. A signalling NaN does not: the conversion quietens it.
func allFloat32(values []float64) bool {
	for _, v := range values {
		if math.Float64bits(float64(float32(v))) != math.Float64bits(v) {
			return false
		}
	}
	return true
}

// shuffle puts the first bytes of all values first, then the second, and so on: exponents beside exponents compress, noise beside noise
// does no harm to them.
func shuffle(dst, src []byte, width int) {
	count := len(src) / width
	for plane := range width {
		out := dst[plane*count : (plane+1)*count]
		for i := range out {
			out[i] = src[i*width+plane]
		}
	}
}

func unshuffle(dst, src []byte, width int) {
	count := len(src) / width
	for plane := range width {
		for i, b := range src[plane*count : (plane+1)*count] {
			dst[i*width+plane] = b
		}
	}
}

// grow returns a slice of n bytes, reusing b where it is long enough.
func grow(b []byte, n int) []byte {
	if cap(b) < n {
		return make([]byte, n)
	}
	return b[:n]
}
