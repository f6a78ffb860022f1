package survey

import (
	"bufio"
	"encoding/csv"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// shared returns a path in the folder of measured data beside the repository, or skips the test.
func shared(t testing.TB, elements ...string) string {
	t.Helper()
	dir, err := os.Getwd()
	if err != nil {
		t.Fatal(err)
	}
	for {
		if _, err := os.Stat(filepath.Join(dir, "go.mod")); err == nil {
			break
		}
		parent := filepath.Dir(dir)
		if parent == dir {
			t.Skip("skipped: no repository above the test")
		}
		dir = parent
	}
	path := filepath.Join(append([]string{filepath.Dir(dir), "shared"}, elements...)...)
	if _, err := os.Stat(path); err != nil {
		t.Skip("skipped: no folder of measured data beside the repository")
	}
	return path
}

// publishedMode is one mode as an independent fit with another model (a source gliding at constant rate) gave it.
type publishedMode struct{ frequencyHz, halfHz, decibel float64 }

// publishedModes reads the modes of a file and the grid it was measured on from the table of independent fits.
func publishedModes(t testing.TB, file string) (modes []publishedMode, g sweep.Grid) {
	in, err := os.Open(shared(t, "data", "measured", "fits.csv"))
	if err != nil {
		t.Fatal(err)
	}
	defer in.Close()
	rows, err := csv.NewReader(in).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	column := map[string]int{}
	for i, name := range rows[0] {
		column[name] = i
	}
	for _, row := range rows[1:] {
		if row[column["file"]] != file {
			continue
		}
		number := func(text string) float64 {
			v, err := strconv.ParseFloat(text, 64)
			if err != nil {
				t.Fatalf("%s: %v", file, err)
			}
			return v
		}
		words := strings.Fields(row[column["note"]]) // amplitude -9.8 dB relative to ...
		modes = append(modes, publishedMode{number(row[column["f0_hz"]]), number(row[column["half_width_hz"]]), number(words[1])})
		g = sweep.Grid{
			StartHz: number(row[column["f_start_hz"]]), StopHz: number(row[column["f_stop_hz"]]), Points: int(number(row[column["points"]])),
		}
	}
	return modes, g
}

// measuredS21 reads S21 in decibels and degrees from a two-port file.
func measuredS21(t testing.TB, path string) (f, re, im []float64) {
	in, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer in.Close()
	for lines := bufio.NewScanner(in); lines.Scan(); {
		words := strings.Fields(lines.Text())
		if len(words) != 9 || strings.HasPrefix(words[0], "!") || strings.HasPrefix(words[0], "#") {
			continue
		}
		var v [5]float64
		for i := range v {
			if v[i], err = strconv.ParseFloat(words[i], 64); err != nil {
				t.Fatal(err)
			}
		}
		sin, cos := math.Sincos(v[4] * math.Pi / 180)
		m := decibels(v[3])
		f, re, im = append(f, v[0]), append(re, m*cos), append(im, m*sin)
	}
	return f, re, im
}

// What the published fits found is found: the strongest mode in its place, the others with their strength.
func TestMeasuredModes(t *testing.T) {
	for _, test := range []struct {
		file string
		most int // modes searched for: the published fits have eleven
	}{
		{"sc-cut-10mhz-a100-top-25c.s2p", 12},
		{"sc-cut-10mhz-a100-top-45c.s2p", DefaultMostModes},
	} {
		if testing.Short() && test.most > 12 {
			continue
		}
		want, g := publishedModes(t, test.file)
		if len(want) != 11 {
			t.Fatalf("%s: %d modes published, want 11", test.file, len(want))
		}
		s := &sweep.Sweep{Role: sweep.Unwanted, Quantity: sweep.S21, Grid: &g}
		s.FrequencyHz, s.Re, s.Im = measuredS21(t, shared(t, "data", "measured", test.file))
		s.Timing = sweep.Timing{Dwell: 942 * time.Microsecond, Phase: sweep.PhaseContinuous}
		var v Surveyor
		var out Result
		v.Survey(&Request{Sweep: s, ScaleUnknown: true, MostModes: test.most}, &out)
		if out.State != resonance.Found || out.MainIndex() != 0 {
			t.Errorf("%s: %s %s", test.file, out.State, out.Detail)
			continue
		}
		t.Logf("%s: %d modes, residual %.2g of the peak, rounds %d", test.file, len(out.Modes), out.Quality.ResidualOverPeak, out.Quality.Rounds)
		for _, w := range want {
			best := out.Modes[0]
			for _, m := range out.Modes {
				if math.Abs(m.FrequencyHz.Value-w.frequencyHz) < math.Abs(best.FrequencyHz.Value-w.frequencyHz) {
					best = m
				}
			}
			off, strength := best.FrequencyHz.Value-w.frequencyHz, -best.Suppression[ResistanceRatio].Value
			within := 2.0
			if w.decibel > -20 {
				within = 1
			}
			t.Logf("%9.1f Hz, half %6.1f Hz, %5.1f dB: off by %+.1f Hz, half %.1f Hz, %.2f dB", w.frequencyHz, w.halfHz, w.decibel, off, best.LoadedWidthHz.Value/2, strength)
			if math.Abs(strength-w.decibel) > within {
				t.Errorf("%s: mode at %.0f Hz %.2f dB, published %.1f dB", test.file, w.frequencyHz, strength, w.decibel)
			}
			if math.Abs(off) > math.Max(15, w.halfHz/2) || w.decibel == 0 && math.Abs(off) > 15 {
				t.Errorf("%s: mode at %.0f Hz off by %.1f Hz", test.file, w.frequencyHz, off)
			}
		}
	}
}
