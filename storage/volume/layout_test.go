package volume

import (
	"bytes"
	"encoding/hex"
	"math"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"
)

// TestGolden holds keys and contents byte by byte against the drawing in doc.go, written out by hand. A difference means that stores already
// written can no longer be read: it takes a new schema number.
func TestGolden(t *testing.T) {
	when := time.Unix(0, 0x0102030405060708).UTC()
	e := &Entry{
		Sequence: 0x1122334455667788, TestedAt: when, ContentHash: [32]byte{0xaa, 31: 0xbb}, Payload: []byte("abc"),
		Terms:   []Term{{[]byte("id"), []byte{0}}},
		Deltas:  []Delta{{[]byte("k"), []int64{1, -1, 64}}},
		Objects: []Object{{Kind: "pt", Hash: [32]byte{0xcc, 31: 0xdd}}},
		Samples: []SampleBlock{{Index: 300, Bytes: []byte("123456789")}},
	}
	hash := func(first, last string) string { return first + strings.Repeat("00", 30) + last }
	for _, c := range []struct{ name, source, got, want string }{
		{"record", "doc.go, bucket records; e3069283 is the check value of CRC-32C for 123456789 (catalogue of parametrised CRC algorithms)",
			hex.EncodeToString(encodeRecord(e)),
			"0102030405060708" + hash("aa", "bb") + "03616263" +
				"01" + "026964" + "0100" +
				"01" + "016b" + "03" + "02" + "01" + "8001" +
				"01" + "027074" + hash("cc", "dd") +
				"01" + "ac02" + "09" + "e3069283"},
		{"record key", "doc.go", hex.EncodeToString(recordKey(e.Sequence)), "1122334455667788"},
		{"sample key", "doc.go", hex.EncodeToString(sampleKey(e.Sequence, 300)), "1122334455667788" + "0000012c"},
		{"term key", "doc.go", hex.EncodeToString(termKey(e.Terms[0], 5)), "6964" + "0001" + "00ff" + "0001" + "0000000000000005"},
		{"object key", "doc.go", hex.EncodeToString(objectKey("pt", e.Objects[0].Hash)), "02" + "7074" + hash("cc", "dd")},
		{"counter", "doc.go; zigzag: 300 is 600 = d804, -2 is 3", hex.EncodeToString(appendNumbers(nil, []int64{300, -2})), "02" + "d804" + "03"},
		{"identity", "doc.go", hex.EncodeToString(identity{7, [16]byte{1, 15: 2}, when}.encode()),
			"0000000000000007" + "01" + strings.Repeat("00", 14) + "02" + "0102030405060708"},
		{"state", "doc.go", hex.EncodeToString(state{1, 2, 3, -1, 5, 6, 7}.encode()),
			"0000000000000001" + "0000000000000002" + "0000000000000003" + "ffffffffffffffff" +
				"0000000000000005" + "0000000000000006" + "0000000000000007"},
		{"folder", "doc.go", FolderName(1), "volume-00000001"},
	} {
		if c.source == "" {
			t.Errorf("%s: no source", c.name)
		}
		if c.got != c.want {
			t.Errorf("%s:\n got %s\nwant %s", c.name, c.got, c.want)
		}
	}
}

// TestRecordRoundTrip encodes arbitrary entries; then every prefix of the bytes must be refused.
func TestRecordRoundTrip(t *testing.T) {
	some := rapid.SliceOfN(rapid.Byte(), 1, 20)
	rapid.Check(t, func(t *rapid.T) {
		e := &Entry{Sequence: rapid.Uint64().Draw(t, "sequence"), Payload: some.Draw(t, "payload")}
		e.TestedAt = time.Unix(0, rapid.Int64().Draw(t, "tested")).UTC()
		for range rapid.IntRange(0, 4).Draw(t, "terms") {
			e.Terms = append(e.Terms, Term{some.Draw(t, "name"), some.Draw(t, "value")})
		}
		for range rapid.IntRange(0, 4).Draw(t, "deltas") {
			e.Deltas = append(e.Deltas, Delta{some.Draw(t, "key"), rapid.SliceOfN(rapid.Int64(), 1, 5).Draw(t, "values")})
		}
		for range rapid.IntRange(0, 3).Draw(t, "samples") {
			e.Samples = append(e.Samples, SampleBlock{rapid.Uint32().Draw(t, "index"), some.Draw(t, "block")})
		}
		encoded := encodeRecord(e)
		got, err := decodeRecord(e.Sequence, encoded)
		got.Schema, got.Revision = 1, "r"
		if d := diff(e.Record("r"), got); err != nil || d != "" {
			t.Fatalf("%v: %s", err, d)
		}
		for n := range encoded {
			if _, err := decodeRecord(1, encoded[:n]); err == nil {
				t.Fatalf("the first %d of %d bytes pass for a record", n, len(encoded))
			}
		}
		if _, err := decodeRecord(1, append(encoded, 0)); err == nil {
			t.Fatal("a byte too many passes")
		}
	})
}

// FuzzDecodeRecord feeds arbitrary bytes: no panic, and what is accepted has the numbers it declares.
func FuzzDecodeRecord(f *testing.F) {
	f.Add(encodeRecord(entry(2)))
	f.Add(bytes.Repeat([]byte{0xff}, 100))
	f.Fuzz(func(t *testing.T, b []byte) {
		r, err := decodeRecord(1, b)
		if err == nil && len(r.Payload)+len(r.Terms)+len(r.Deltas) > len(b) {
			t.Errorf("%d bytes became %+v", len(b), r)
		}
	})
}

// TestSize holds a volume of inspections of the usual size to at most 2.5 times what is live in it, plus 32 MiB.
func TestSize(t *testing.T) {
	t.Parallel()
	n := uint64(3000)
	if testing.Short() {
		n = 400
	}
	v := create(t, Options{Revision: "test-1"})
	live := int64(0)
	for s := uint64(1); s <= n; {
		var batch []*Entry
		for range 1 + s%16 {
			e := entry(s)
			e.Payload = make([]byte, 2000)
			e.Samples = []SampleBlock{{Index: 0, Bytes: make([]byte, 6000)}}
			live += int64(len(encodeRecord(e)) + len(e.Samples[0].Bytes))
			for _, term := range e.Terms {
				live += int64(len(termKey(term, s)))
			}
			batch = append(batch, e)
			s++
		}
		if err := v.Append(batch); err != nil {
			t.Fatal(err)
		}
	}
	info := v.Info()
	used := info.RecordsBytes + info.SamplesBytes
	t.Logf("%d entries: %d bytes live, %d used (%.2f times)", info.Records, live, used, float64(used)/float64(live))
	if float64(used) > 2.5*float64(live)+math.Min(32<<20, float64(live)) {
		t.Errorf("%d bytes for %d live ones", used, live)
	}
}
