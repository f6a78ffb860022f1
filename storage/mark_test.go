package storage

import (
	"errors"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/disktest"
)

var testStore = [16]byte{1, 2, 3}

// TestMarkSurvivesPowerCut cuts the power at a random moment while the mark moves, keeping 0, 30, 70 or 100 % of what was not synced. What
// opens afterwards is the last position whose move returned, or the one that was under way: never less, never something else.
func TestMarkSurvivesPowerCut(t *testing.T) {
	seeds := 1000
	if testing.Short() {
		seeds = 250
	}
	for seed := range seeds {
		random := rand.New(rand.NewPCG(uint64(seed), 1))
		keep := []float64{0, 0.3, 0.7, 1}[seed%4]
		memory := disktest.NewCrashable()
		faulty := &disktest.Faulty{Files: memory, FailAt: random.IntN(60), Sticky: true}
		acknowledged, underWay, made := position{}, position{}, false
		if err := createMark(faulty, "store/mark", testStore); err == nil {
			made = true
			m, err := openMark(faulty, "store/mark", testStore)
			if err != nil {
				t.Fatal(err)
			}
			for {
				underWay = position{acknowledged.Volume + uint64(random.IntN(2)), acknowledged.Sequence + 1 + uint64(random.IntN(9))}
				if err := m.move(underWay); err != nil {
					break
				}
				acknowledged = underWay
			}
			// The next sync might succeed and prove nothing about the one that failed.
			faulty.Sticky = false
			if err := m.move(underWay); err == nil {
				t.Errorf("seed %d: a mark that failed moves again", seed)
			}
		}
		left := memory.Crash(random, keep)
		m, err := openMark(left, "store/mark", testStore)
		switch {
		case errors.Is(err, os.ErrNotExist) && !made:
		case err != nil:
			t.Errorf("seed %d: %v", seed, err)
		case m.at != acknowledged && m.at != underWay:
			t.Errorf("seed %d: the mark says %v, acknowledged was %v, under way %v", seed, m.at, acknowledged, underWay)
		default:
			// It must be usable: move on, lose power again, still there.
			next := position{9, acknowledged.Sequence + 100}
			if err := m.move(next); err != nil {
				t.Fatal(err)
			}
			again, err := openMark(left.Crash(random, 0), "store/mark", testStore)
			if err != nil || again.at != next {
				t.Errorf("seed %d: after a second power cut: %+v, %v", seed, again, err)
			}
		}
	}
}

// TestMarkDamage damages the mark file in every way one at a time.
func TestMarkDamage(t *testing.T) {
	path := filepath.Join(t.TempDir(), markName)
	if err := createMark(disk.OS(), path, testStore); err != nil {
		t.Fatal(err)
	}
	m, err := openMark(disk.OS(), path, testStore)
	if err != nil {
		t.Fatal(err)
	}
	for s := uint64(1); s <= 5; s++ {
		if err := m.move(position{1, 10 * s}); err != nil {
			t.Fatal(err)
		}
	}
	if err := m.close(); err != nil {
		t.Fatal(err)
	}
	sound, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	refused := []position{}
	for _, c := range []struct {
		name   string
		change func(b []byte) []byte
		want   []position // empty: refused
	}{
		{"sound", func(b []byte) []byte { return b }, []position{{1, 50}}},
		{"empty", func([]byte) []byte { return nil }, refused},
		{"cut", func(b []byte) []byte { return b[:markSize-1] }, refused},
		{"longer", func(b []byte) []byte { return append(b, 0) }, refused},
		// Writes 0 and 1 were the creation's, so the fifth move is write 6, in the first slot.
		{"newer slot zeroed", func(b []byte) []byte { clear(b[:markSpacing]); return b }, []position{{1, 40}}},
		{"older slot zeroed", func(b []byte) []byte { clear(b[markSpacing:]); return b }, []position{{1, 50}}},
		{"both zeroed", func(b []byte) []byte { clear(b); return b }, refused},
		{"slots swapped", func(b []byte) []byte { return append(b[markSpacing:], b[:markSpacing]...) }, refused},
		{"another store", func(b []byte) []byte {
			copy(b, encodeMark([16]byte{9}, 4, position{1, 40}))
			copy(b[markSpacing:], encodeMark([16]byte{9}, 5, position{1, 50}))
			return b
		}, refused},
	} {
		if err := os.WriteFile(path, c.change(append([]byte{}, sound...)), 0o600); err != nil {
			t.Fatal(err)
		}
		m, err := openMark(disk.OS(), path, testStore)
		switch {
		case len(c.want) == 0 && !errors.Is(err, damage.ErrDamaged):
			t.Errorf("%s: %v", c.name, err)
		case len(c.want) == 1 && (err != nil || m.at != c.want[0]):
			t.Errorf("%s: %+v, %v", c.name, m, err)
		}
		if err == nil {
			if err := m.close(); err != nil {
				t.Error(err)
			}
		}
	}
	// Any flipped bit of the newer slot makes that slot unreadable, never another position.
	for bit := range 8 * markSlot {
		b := append([]byte{}, sound...)
		b[bit/8] ^= 1 << (bit % 8)
		if err := os.WriteFile(path, b, 0o600); err != nil {
			t.Fatal(err)
		}
		m, err := openMark(disk.OS(), path, testStore)
		if err != nil || m.at != (position{1, 40}) {
			t.Fatalf("bit %d: %+v, %v", bit, m, err)
		}
		if err := m.close(); err != nil {
			t.Error(err)
		}
	}
	if err := os.Remove(path); err != nil {
		t.Fatal(err)
	}
	if _, err := openMark(disk.OS(), path, testStore); !errors.Is(err, damage.ErrDamaged) || !errors.Is(err, os.ErrNotExist) {
		t.Errorf("missing: %v", err)
	}
}
