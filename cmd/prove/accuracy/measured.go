package accuracy

import (
	"encoding/csv"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"time"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/peer"
	"example.com/admit/fixtures/touchstone"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// measuredFolder is where the measured sweeps of others lie, beside the repository. They are no part of it.
func measuredFolder() string { return peer.Testdata("..", "..", "shared", "data", "measured") }

// measuredDwell is the dwell of the fast measured sweeps, as the description of the data has it.
const measuredDwell = 945600 * time.Nanosecond

// Measured fits the real sweeps of a crystal of high Q that were far too fast for it: network unknown, grid given, phase-continuous, and the
// dwell stated or to be found. The gates: f0 within 1 Hz of the fit that comes with the data, the dwell within 1 % of 0.946 ms, a
// residual below 0.2 % of the trace's peak, Q from 1.40 to 1.60 million. It returns fs.ErrNotExist where the sweeps are not there.
func Measured(_ Options, r *trial.Report) error {
	published, err := publishedFits()
	if err != nil {
		return err
	}
	t := r.Table("Real fast sweeps, C mode at 10 MHz", "file", "dwell", "state", "f0 - published, Hz", "Q", "u(Q)", "dwell ms", "residual/peak %", "time")
	defer t.Close()
	for _, row := range published {
		s, err := row.sweep()
		if err != nil {
			return err
		}
		for _, stated := range []time.Duration{measuredDwell, 0} {
			s.Timing = sweep.Timing{Dwell: stated, Phase: sweep.PhaseContinuous}
			row.fit(r, t, s, stated)
		}
	}
	return nil
}

// fit fits one sweep and holds it against the gates.
func (row publishedFit) fit(r *trial.Report, t *trial.Table, s *sweep.Sweep, stated time.Duration) {
	var fitter resonance.Fitter
	var e resonance.Estimate
	began := time.Now()
	fitter.Fit(&resonance.Request{Sweep: s, ScaleUnknown: true}, &e)
	took := time.Since(began).Round(time.Millisecond)
	mode := e.Unit().Modes[0]
	q := mode.QualityFactor()
	peak := 0.0
	for i := range s.Re {
		peak = math.Max(peak, math.Hypot(s.Re[i], s.Im[i]))
	}
	residual := e.Quality.NoiseRMS / peak
	label := "not stated"
	if stated > 0 {
		label = "stated"
	}
	t.Row(row.file, label, e.State, fmt.Sprintf("%+.3f", mode.ResonanceHz-row.hz), fmt.Sprintf("%.0f", q),
		fmt.Sprintf("%.0f", q*math.Sqrt(e.Statistical[resonance.LogInductance][resonance.LogInductance])),
		fmt.Sprintf("%.5f", 1e3*e.Quality.DwellSeconds), fmt.Sprintf("%.3f", 100*residual), took)
	name := fmt.Sprintf("%s, dwell %s", row.file, label)
	if e.State != resonance.Found {
		r.Fail("%s: %s, %s", name, e.State, e.Detail)
	}
	if !(math.Abs(mode.ResonanceHz-row.hz) <= 1) {
		r.Fail("%s: f0 is %+.3f Hz from the published fit, want within 1 Hz", name, mode.ResonanceHz-row.hz)
	}
	if !(math.Abs(e.Quality.DwellSeconds/0.946e-3-1) <= 0.01) {
		r.Fail("%s: dwell %.5f ms, want 0.946 ms within 1 %%", name, 1e3*e.Quality.DwellSeconds)
	}
	if !(residual < 0.002) {
		r.Fail("%s: residual %.3f %% of the peak, want below 0.2 %%", name, 100*residual)
	}
	if !(q >= 1.40e6 && q <= 1.60e6) {
		r.Fail("%s: Q %.4g, want 1.40 to 1.60 million", name, q)
	}
}

// publishedFit is a row of the fits that come with the measured sweeps.
type publishedFit struct {
	file            string
	hz              float64
	startHz, stopHz float64
	points          int
}

// publishedFits reads the rows of the fast sweeps of the C mode.
func publishedFits() ([]publishedFit, error) {
	file, err := os.Open(filepath.Join(measuredFolder(), "fits.csv"))
	if err != nil {
		return nil, err
	}
	defer file.Close()
	rows, err := csv.NewReader(file).ReadAll()
	if err != nil {
		return nil, err
	}
	column := func(row []string, name string) string { return row[slices.Index(rows[0], name)] }
	var out []publishedFit
	for _, row := range rows[1:] {
		if !strings.HasPrefix(column(row, "file"), "sc-cut-10mhz-c300-") {
			continue
		}
		p := publishedFit{file: column(row, "file")}
		var faults [4]error
		p.hz, faults[0] = strconv.ParseFloat(column(row, "f0_hz"), 64)
		p.startHz, faults[1] = strconv.ParseFloat(column(row, "f_start_hz"), 64)
		p.stopHz, faults[2] = strconv.ParseFloat(column(row, "f_stop_hz"), 64)
		p.points, faults[3] = strconv.Atoi(column(row, "points"))
		if err := errors.Join(faults[:]...); err != nil {
			return nil, fmt.Errorf("fits.csv, %s: %w", p.file, err)
		}
		out = append(out, p)
	}
	if len(out) == 0 {
		return nil, fmt.Errorf("fits.csv: no sweep of the C mode: %w", fs.ErrNotExist)
	}
	return out, nil
}

// sweep reads the samples.
func (row publishedFit) sweep() (*sweep.Sweep, error) {
	file, err := os.Open(filepath.Join(measuredFolder(), row.file))
	if err != nil {
		return nil, err
	}
	defer file.Close()
	data, err := touchstone.Read(row.file, file, touchstone.Options{Grid: &touchstone.Grid{StartHz: row.startHz, StopHz: row.stopHz, Points: row.points}})
	if err != nil {
		return nil, err
	}
	return &sweep.Sweep{
		Role: sweep.Main, Quantity: sweep.S21, FrequencyHz: data.FrequencyHz, Re: data.P21.Re, Im: data.P21.Im,
		Grid: &sweep.Grid{StartHz: row.startHz, StopHz: row.stopHz, Points: row.points},
	}, nil
}
