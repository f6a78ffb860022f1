package envelope

import (
	"bytes"
	"encoding/hex"
	"errors"
	"testing"

	"pgregory.net/rapid"

	"example.com/admit/storage/volume/damage"
)

// TestGolden holds the stored form byte by byte: every program that ever wrote a store depends on it.
func TestGolden(t *testing.T) {
	for _, c := range []struct {
		name, source string
		got          []byte
		want         string
	}{
		{
			name:   "check value of CRC-32C",
			source: "RFC 3720 appendix B.4: 32 bytes of zeros have CRC-32C 8a9136aa (there with bytes reversed: aa 36 91 8a)",
			got:    []byte{byte(Checksum(make([]byte, 32)) >> 24), byte(Checksum(make([]byte, 32)) >> 16), byte(Checksum(make([]byte, 32)) >> 8), byte(Checksum(make([]byte, 32)))},
			want:   "8a9136aa",
		},
		{
			name:   "sealed value",
			source: "bit-by-bit CRC-32C (reflected polynomial 82f63b78) of \"records\\0\\x01\\x02\" 01 ac02 \"content\", independent of hash/crc32",
			got:    Seal("records", []byte{1, 2}, 300, []byte("content")),
			want:   bitByBit("records\x00\x01\x02\x01\xac\x02content") + "01ac02" + hex.EncodeToString([]byte("content")),
		},
	} {
		if c.source == "" {
			t.Errorf("%s: no source", c.name)
		}
		if got := hex.EncodeToString(c.got); got != c.want {
			t.Errorf("%s: %s, want %s", c.name, got, c.want)
		}
	}
}

func bitByBit(s string) string {
	crc := ^uint32(0)
	for _, b := range []byte(s) {
		crc ^= uint32(b)
		for range 8 {
			if crc&1 == 1 {
				crc = crc>>1 ^ 0x82f63b78
			} else {
				crc >>= 1
			}
		}
	}
	crc = ^crc
	return hex.EncodeToString([]byte{byte(crc >> 24), byte(crc >> 16), byte(crc >> 8), byte(crc)})
}

// TestEveryFlipIsFound seals arbitrary values and changes one bit of value or key, or moves the value: always damage, named.
func TestEveryFlipIsFound(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		bucket := rapid.SampledFrom([]string{"records", "terms", "a"}).Draw(t, "bucket")
		key := rapid.SliceOfN(rapid.Byte(), 1, 20).Draw(t, "key")
		content := rapid.SliceOfN(rapid.Byte(), 0, 100).Draw(t, "content")
		revision := rapid.Uint64().Draw(t, "revision")
		stored := Seal(bucket, key, revision, content)
		value, err := Open(bucket, key, stored)
		if err != nil || value.Schema != Schema || value.Revision != revision || !bytes.Equal(value.Content, content) {
			t.Fatalf("came back as %+v, %v", value, err)
		}
		at := rapid.IntRange(0, 8*len(stored)-1).Draw(t, "bit")
		stored[at/8] ^= 1 << (at % 8)
		_, err = Open(bucket, key, stored)
		var found *damage.Error
		if !errors.As(err, &found) || found.Bucket != bucket || !bytes.Equal(found.Key, key) {
			t.Fatalf("flipped bit %d: %v", at, err)
		}
		stored[at/8] ^= 1 << (at % 8)
		at = rapid.IntRange(0, 8*len(key)-1).Draw(t, "key bit")
		key[at/8] ^= 1 << (at % 8)
		if _, err := Open(bucket, key, stored); !errors.Is(err, damage.ErrDamaged) {
			t.Fatalf("under another key: %v", err)
		}
		key[at/8] ^= 1 << (at % 8)
		if _, err := Open(bucket+"s", key, stored); !errors.Is(err, damage.ErrDamaged) {
			t.Fatalf("in another bucket: %v", err)
		}
	})
}

func TestShortAndMalformed(t *testing.T) {
	for n := range 6 {
		if _, err := Open("b", []byte("k"), make([]byte, n)); !errors.Is(err, damage.ErrDamaged) {
			t.Errorf("%d bytes: %v", n, err)
		}
	}
	// A right sum over varints that never end.
	for _, body := range [][]byte{bytes.Repeat([]byte{0xff}, 12), append([]byte{1}, bytes.Repeat([]byte{0xff}, 12)...)} {
		stored := append(make([]byte, 4), body...)
		s := sum("b", []byte("k"), body)
		stored[0], stored[1], stored[2], stored[3] = byte(s>>24), byte(s>>16), byte(s>>8), byte(s)
		if _, err := Open("b", []byte("k"), stored); !errors.Is(err, damage.ErrDamaged) {
			t.Errorf("%x: %v", body, err)
		}
	}
}
