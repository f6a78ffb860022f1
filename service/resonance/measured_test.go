package resonance

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
			t.Skip("no repository above the test")
		}
		dir = parent
	}
	path := filepath.Join(append([]string{filepath.Dir(dir), "shared"}, elements...)...)
	if _, err := os.Stat(path); err != nil {
		t.Skip("the folder of measured data is not beside the repository: " + path)
	}
	return path
}

// published is one row of the independent fits that come with the measured data.
type published struct {
	file, sweep, mode string
	f0, q, r1, c1, l1 float64
	start, stop       float64
}

func publishedFits(t testing.TB) []published {
	file, err := os.Open(shared(t, "data", "measured", "fits.csv"))
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	rows, err := csv.NewReader(file).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	column := map[string]int{}
	for i, name := range rows[0] {
		column[name] = i
	}
	var out []published
	for _, row := range rows[1:] {
		number := func(name string) float64 {
			v, _ := strconv.ParseFloat(row[column[name]], 64) // an empty cell is 0: not determined
			return v
		}
		out = append(out, published{
			file: row[column["file"]], sweep: row[column["sweep"]], mode: row[column["harmonic_or_mode"]],
			f0: number("f0_hz"), q: number("q"), r1: number("r1_ohm"), c1: number("c1_ff") * 1e-15, l1: number("l1_mh") * 1e-3,
			start: number("f_start_hz"), stop: number("f_stop_hz"),
		})
	}
	return out
}

// numbers reads lines of numbers; comments, option lines and headers are passed over.
func numbers(t testing.TB, path string) [][]float64 {
	file, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	var rows [][]float64
	scanner := bufio.NewScanner(file)
	for scanner.Scan() {
		var row []float64
		for _, word := range strings.FieldsFunc(scanner.Text(), func(r rune) bool { return r == ' ' || r == '\t' || r == ',' }) {
			v, err := strconv.ParseFloat(word, 64)
			if err != nil {
				row = nil
				break
			}
			row = append(row, v)
		}
		if len(row) > 0 {
			rows = append(rows, row)
		}
	}
	return rows
}

// sweepOf builds a sweep from frequency, real and imaginary part.
func sweepOf(q sweep.Quantity, rows [][]float64) *sweep.Sweep {
	s := &sweep.Sweep{Role: sweep.Main, Quantity: q}
	for _, r := range rows {
		s.FrequencyHz, s.Re, s.Im = append(s.FrequencyHz, r[0]), append(s.Re, r[1]), append(s.Im, r[2])
	}
	return s
}

// TestMeasuredDiscs: reflections of discs in a cell, nominal network. Their reference plane is about a degree off, which a narrow window of a
// reflection cannot tell from C0 and loss, so a free phase is not identifiable and must not be fitted.
func TestMeasuredDiscs(t *testing.T) {
	var f Fitter
	var est Estimate
	seen := map[string]bool{}
	for _, row := range publishedFits(t) {
		if seen[row.file+row.mode] || !strings.HasPrefix(row.file, "at-cut") {
			continue // the files hold the first sweep of each state
		}
		seen[row.file+row.mode] = true
		name := strings.TrimSuffix(row.file, ".csv") + "-n" + row.mode + ".s1p"
		s := sweepOf(sweep.S11, numbers(t, shared(t, "data", "measured", name)))
		f.Fit(&Request{Sweep: s, Terms: reflection.terms(s.Points())}, &est)
		m := est.Unit().Modes[0]
		off := map[string][2]float64{ // difference and tolerance
			"fs, ppm": {(est.Value[ResonanceHz]/row.f0 - 1) * 1e6, 1},
			"R1, %":   {(m.ResistanceOhm/row.r1 - 1) * 100, 2.5},
			"C1, %":   {(m.CapacitanceFarad()/row.c1 - 1) * 100, 2.5},
			"L1, %":   {(m.InductanceHenry/row.l1 - 1) * 100, 2.5},
			"Q, %":    {(m.QualityFactor()/row.q - 1) * 100, 4},
		}
		t.Logf("%s: %v", name, off)
		for quantity, o := range off {
			if est.State != Found || !(math.Abs(o[0]) <= o[1]) {
				t.Errorf("%s: %s %s, %s off by %.3f, allowed %g", name, est.State, est.Detail, quantity, o[0], o[1])
			}
		}
		if est.Fitted[PhaseRad] || est.Quality.FreePhaseSigma != 0 {
			t.Errorf("%s: a phase of %.4f is claimed to be identifiable", name, est.Quality.FreePhaseRad)
		}
	}
	if len(seen) != 12 {
		t.Errorf("%d files, want 12", len(seen))
	}
}

// TestMeasuredAdmittanceSweeps: every sweep of the discs, as stated admittances.
func TestMeasuredAdmittanceSweeps(t *testing.T) {
	var f Fitter
	var est Estimate
	files := map[string][][]float64{}
	worst, n := 0.0, 0
	for _, row := range publishedFits(t) {
		if !strings.HasPrefix(row.file, "at-cut") {
			continue
		}
		if files[row.file] == nil {
			files[row.file] = numbers(t, shared(t, "data", "measured", row.file))
		}
		var rows [][]float64
		for _, r := range files[row.file] {
			if strconv.Itoa(int(r[0])) == row.sweep && strconv.Itoa(int(r[1])) == row.mode {
				rows = append(rows, r[2:])
			}
		}
		s := sweepOf(sweep.Admittance, rows)
		f.Fit(&Request{Sweep: s, Terms: admittances.terms(s.Points())}, &est)
		ppm := (est.Value[ResonanceHz]/row.f0 - 1) * 1e6
		worst = math.Max(worst, math.Abs(ppm))
		n++
		if est.State != Found || !(math.Abs(ppm) <= 1) {
			t.Errorf("%s sweep %s mode %s: %s %s, fs off by %.3f ppm", row.file, row.sweep, row.mode, est.State, est.Detail, ppm)
		}
	}
	t.Logf("%d sweeps, fs within %.3f ppm", n, worst)
	if n < 100 {
		t.Errorf("%d sweeps, want all of the twelve states", n)
	}
}

// transmission reads S21 of a two-port file in decibels and degrees, frequencies times scale.
func transmission(t testing.TB, name string, scale float64) *sweep.Sweep {
	rows := numbers(t, shared(t, "data", "measured", name))
	for i, r := range rows {
		m, a := math.Pow(10, r[3]/20), r[4]*math.Pi/180
		rows[i] = []float64{r[0] * scale, m * math.Cos(a), m * math.Sin(a)}
	}
	return sweepOf(sweep.S21, rows)
}

// TestMeasuredFilter: a band-pass filter is no crystal unit, whatever part of it is looked at.
func TestMeasuredFilter(t *testing.T) {
	whole := transmission(t, "saw-filter-401mhz-not-a-resonator.s2p", 1e9)
	for _, part := range [][2]int{{0, 1001}, {300, 700}, {400, 600}} {
		s := *whole
		s.FrequencyHz, s.Re, s.Im = s.FrequencyHz[part[0]:part[1]], s.Re[part[0]:part[1]], s.Im[part[0]:part[1]]
		var f Fitter
		var est Estimate
		f.Fit(&Request{Sweep: &s, Terms: seriesThrough.terms(s.Points())}, &est)
		if est.State != Misfit {
			t.Errorf("points %v: %s %s, want %s", part, est.State, est.Detail, Misfit)
		}
	}
}

// TestMeasuredFastSweeps: sweeps that crossed a resonance of Q 1.5 million in less than its ring-up time, network and timing not stated.
func TestMeasuredFastSweeps(t *testing.T) {
	for _, row := range publishedFits(t) {
		if !strings.HasPrefix(row.file, "sc-cut-10mhz-c300") {
			continue
		}
		s := transmission(t, row.file, 1)
		s.Grid = &sweep.Grid{StartHz: row.start, StopHz: row.stop, Points: s.Points()}
		for _, timing := range []sweep.Timing{{}, {Dwell: 945600 * time.Nanosecond, Phase: sweep.PhaseContinuous}} {
			s.Timing = timing
			var f Fitter
			var est Estimate
			f.Fit(&Request{Sweep: s, ScaleUnknown: true}, &est)
			quality := est.Unit().Modes[0].QualityFactor()
			off := est.Value[ResonanceHz] - row.f0
			q := est.Quality
			if est.State != Found || math.Abs(off) > 1 || quality < 1.4e6 || quality > 1.6e6 || math.Abs(q.DwellSeconds/0.946e-3-1) > 0.01 || q.ResidualOverPeak > 0.002 {
				t.Errorf("%s, dwell stated %v: %s %s, f0 off by %.2f Hz, Q %.4g, dwell %.4g s, residual %.4f of the peak",
					row.file, timing.Dwell, est.State, est.Detail, off, quality, q.DwellSeconds, q.ResidualOverPeak)
			}
			t.Logf("%s: f0 %+.3f Hz, Q %.4g, dwell %.5g s, residual %.5f of the peak", row.file, off, quality, q.DwellSeconds, q.ResidualOverPeak)
		}
	}
}
