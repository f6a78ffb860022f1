package volume

import (
	"encoding/binary"
	"math"
	"math/rand/v2"
	"testing"

	"pgregory.net/rapid"
)

func newCodec(t testing.TB) (*Encoder, *Decoder) {
	t.Helper()
	encoder, err := NewEncoder()
	if err != nil {
		t.Fatal(err)
	}
	decoder, err := NewDecoder()
	if err != nil {
		t.Fatal(err)
	}
	return encoder, decoder
}

func sameBits(a, b []float64) bool {
	if len(a) != len(b) {
		return false
	}
	for i := range a {
		if math.Float64bits(a[i]) != math.Float64bits(b[i]) {
			return false
		}
	}
	return true
}

// TestCodecProperty tries arrays of arbitrary bit patterns, of float32 bit patterns, and smooth ones, all with the same two buffers.
func TestCodecProperty(t *testing.T) {
	encoder, decoder := newCodec(t)
	rapid.Check(t, func(t *rapid.T) {
		kind := rapid.SampledFrom([]string{"any bits", "float32 bits", "smooth", "mixed"}).Draw(t, "kind")
		n := rapid.IntRange(0, 300).Draw(t, "n")
		values := make([]float64, n)
		for i := range values {
			switch {
			case kind == "any bits", kind == "mixed" && i%7 == 0:
				values[i] = math.Float64frombits(rapid.Uint64().Draw(t, "bits"))
			case kind == "smooth":
				values[i] = math.Sin(float64(i) / 40)
			default:
				values[i] = float64(math.Float32frombits(rapid.Uint32().Draw(t, "bits")))
			}
		}
		encoded := encoder.Encode([]byte("before"), values)
		if string(encoded[:6]) != "before" {
			t.Fatal("Encode overwrote what stood before")
		}
		got, err := decoder.Decode(nil, encoded[6:], n)
		if err != nil || !sameBits(got, values) {
			t.Fatalf("%v came back as %v (%v)", values, got, err)
		}
		if worst := 1 + binary.MaxVarintLen64 + 8*n; len(encoded)-6 > worst {
			t.Fatalf("%d values became %d bytes", n, len(encoded)-6)
		}
	})
}

func TestCodecMethods(t *testing.T) {
	quiet := math.Float64frombits(0x7ff8_0000_2000_0000) // payload fits a float32
	signalling := math.Float64frombits(0x7ff4_0000_0000_0000)
	wide := math.Float64frombits(0x7ff8_0000_0000_0001) // payload does not fit a float32
	noise := rand.New(rand.NewPCG(1, 2))
	random := make([]float64, 64)
	random32 := make([]float64, 64)
	for i := range random {
		random[i] = math.Float64frombits(noise.Uint64())
		random32[i] = float64(math.Float32frombits(noise.Uint32()&0x3fff_ffff | 1))
	}
	zeros := make([]float64, 1000)
	ramp := make([]float64, 1000)
	for i := range ramp {
		ramp[i] = 1.0 / 3 * (1 + float64(i)*1e-9)
	}
	for _, c := range []struct {
		name   string
		values []float64
		method byte
	}{
		{"nothing", nil, methodRaw32},
		{"one float32", []float64{0.5}, methodRaw32},
		{"one float64", []float64{0.1}, methodRaw64},
		{"negative zeros", append([]float64{math.Copysign(0, -1)}, zeros...), methodShuffled},
		{"quiet NaN", append([]float64{quiet}, zeros...), methodShuffled},
		{"signalling NaN", append([]float64{signalling}, zeros...), methodXOR64},
		{"NaN of a wide payload", append([]float64{wide}, zeros...), methodXOR64},
		{"infinities", append([]float64{math.Inf(1), math.Inf(-1)}, zeros...), methodShuffled},
		{"float64 noise", random, methodRaw64},
		{"float32 noise", random32, methodRaw32},
		{"smooth float64", ramp, methodXOR64},
	} {
		t.Run(c.name, func(t *testing.T) {
			encoder, decoder := newCodec(t)
			encoded := encoder.Encode(nil, c.values)
			if encoded[0] != c.method {
				t.Errorf("method %d, want %d (%d bytes)", encoded[0], c.method, len(encoded))
			}
			got, err := decoder.Decode(nil, encoded, len(c.values))
			if err != nil || !sameBits(got, c.values) {
				t.Errorf("came back as %v (%v)", got, err)
			}
		})
	}
}

// TestCodecLargest is the largest sweep the wire admits, real and imaginary part in one array.
func TestCodecLargest(t *testing.T) {
	encoder, decoder := newCodec(t)
	for _, exact := range []bool{true, false} {
		values := make([]float64, 2*200_001)
		for i := range values {
			values[i] = math.Sin(float64(i) / 1000)
			if exact {
				values[i] = float64(float32(values[i]))
			}
		}
		encoded := encoder.Encode(nil, values)
		got, err := decoder.Decode(nil, encoded, len(values))
		if err != nil || !sameBits(got, values) {
			t.Errorf("exact %v: %d bytes came back as %d values (%v)", exact, len(encoded), len(got), err)
		}
	}
}

// TestDecodeRefuses holds that no bytes make the decoder fault, or allocate beyond what they declare and the caller allows.
func TestDecodeRefuses(t *testing.T) {
	encoder, decoder := newCodec(t)
	good := encoder.Encode(nil, make([]float64, 1000))
	declare := func(method byte, count uint64, body []byte) []byte {
		return append(binary.AppendUvarint([]byte{method}, count), body...)
	}
	_, n := binary.Uvarint(good[1:])
	frame := good[1+n:]
	for _, c := range []struct {
		name    string
		encoded []byte
	}{
		{"empty", nil},
		{"only a method", []byte{methodRaw64}},
		{"unknown method", declare(77, 0, nil)},
		{"more than allowed", declare(methodShuffled, 2001, frame)},
		{"raw cut off", declare(methodRaw64, 2, make([]byte, 15))},
		{"frame holds more than declared", declare(methodShuffled, 10, frame)},
		{"frame holds less than declared", declare(methodShuffled, 1500, frame)},
		{"frame is garbage", declare(methodXOR64, 10, []byte("garbage garbage"))},
		{"frame cut off", declare(methodShuffled, 1000, frame[:len(frame)-1])},
	} {
		t.Run(c.name, func(t *testing.T) {
			if got, err := decoder.Decode(nil, c.encoded, 2000); err == nil {
				t.Errorf("decoded to %d values", len(got))
			}
		})
	}
	huge := declare(methodShuffled, 1<<40, frame)
	allocated := testing.AllocsPerRun(10, func() {
		if _, err := decoder.Decode(nil, huge, 1<<20); err == nil {
			t.Error("a huge count was accepted")
		}
	})
	if allocated > 10 {
		t.Errorf("%v allocations to refuse a huge count", allocated)
	}
}

func FuzzDecode(f *testing.F) {
	encoder, decoder := newCodec(f)
	f.Add(encoder.Encode(nil, []float64{1, 2, 3}))
	f.Add(encoder.Encode(nil, make([]float64, 100)))
	f.Fuzz(func(t *testing.T, encoded []byte) {
		values, err := decoder.Decode(nil, encoded, 4096)
		if err != nil {
			return
		}
		again, err := decoder.Decode(nil, encoder.Encode(nil, values), 4096)
		if err != nil || !sameBits(again, values) {
			t.Fatalf("%v became %v (%v)", values, again, err)
		}
	})
}

func benchmarkSweep(float32Exact bool) []float64 {
	noise := rand.New(rand.NewPCG(3, 4))
	values := make([]float64, 802)
	for i := range 401 {
		x := (float64(i) - 200) / 20
		values[i] = 1/(1+x*x) + 1e-4*noise.NormFloat64()
		values[401+i] = -x/(1+x*x) + 1e-4*noise.NormFloat64()
	}
	if float32Exact {
		for i, v := range values {
			values[i] = float64(float32(v))
		}
	}
	return values
}

func BenchmarkEncode(b *testing.B) {
	for _, c := range []struct {
		name  string
		exact bool
	}{{"float32", true}, {"float64", false}} {
		b.Run(c.name+"/401points", func(b *testing.B) {
			encoder, _ := newCodec(b)
			values := benchmarkSweep(c.exact)
			var encoded []byte
			b.SetBytes(int64(8 * len(values)))
			for b.Loop() {
				encoded = encoder.Encode(encoded[:0], values)
			}
			b.ReportMetric(float64(len(encoded)), "bytes/sweep")
		})
	}
}

func BenchmarkDecode(b *testing.B) {
	encoder, decoder := newCodec(b)
	encoded := encoder.Encode(nil, benchmarkSweep(true))
	values := make([]float64, 0, 802)
	b.SetBytes(8 * 802)
	for b.Loop() {
		var err error
		if values, err = decoder.Decode(values[:0], encoded, 802); err != nil {
			b.Fatal(err)
		}
	}
}
