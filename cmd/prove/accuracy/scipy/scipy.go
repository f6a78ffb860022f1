// Package scipy has scipy.optimize.least_squares fit the same samples, with a model of its own written in Python: a second opinion on the
// estimates, and the measure of speed. It needs Debian's python3 with scipy (peer.Scipy).
package scipy

import (
	"bytes"
	"context"
	_ "embed"
	"encoding/json"
	"errors"
	"fmt"
	"os/exec"

	"example.com/admit/cmd/prove/peer"
)

//go:embed fit.py
var script string

// ErrMissing is returned where python3 with scipy is not installed.
var ErrMissing = errors.New("scipy: needs the " + peer.Scipy.Package)

// Circuit is a unit of one mode, in SI units.
type Circuit struct {
	ResonanceHz     float64 `json:"fs"`
	ResistanceOhm   float64 `json:"r1"`
	InductanceHenry float64 `json:"l1"`
	ShuntFarad      float64 `json:"c0"`
}

// Problem is one sweep in a network that does not depend on frequency: a sample is Open + Gain I, I the current that one volt behind Source
// drives into the unit. Complex numbers are pairs of real and imaginary part.
type Problem struct {
	FrequencyHz  []float64  `json:"frequency"`
	Re           []float64  `json:"re"`
	Im           []float64  `json:"im"`
	Open         [2]float64 `json:"open"`
	Gain         [2]float64 `json:"gain"`
	Source       [2]float64 `json:"source"`
	NoiseRMS     float64    `json:"noise"`     // complex
	BandwidthHz  float64    `json:"bandwidth"` // scale of the offset of fs
	Start        Circuit    `json:"start"`
	DwellSeconds float64    `json:"dwell"` // 0: settled
	Averaging    float64    `json:"averaging"`
	LeadIn       float64    `json:"lead_in"`
	Tolerance    float64    `json:"tolerance"` // of parameters and cost, relative; 0: scipy's own
	Repeats      int        `json:"repeats"`   // of which the fastest counts
}

// Result is what scipy says.
type Result struct {
	OffsetHz        float64 `json:"fs_offset"` // fs less that of the start
	ResistanceOhm   float64 `json:"r1"`
	InductanceHenry float64 `json:"l1"`
	ShuntFarad      float64 `json:"c0"`
	Seconds         float64 `json:"seconds"` // of one fit, covariance included
	Evaluations     int     `json:"evaluations"`
	DeviationHz     float64 `json:"sd_fs"`
}

// Fit has scipy fit the problems, one after the other.
func Fit(ctx context.Context, problems []Problem) ([]Result, error) {
	python := peer.Scipy.Find()
	if python == "" {
		return nil, ErrMissing
	}
	in, err := json.Marshal(problems)
	if err != nil {
		return nil, err
	}
	var out, trouble bytes.Buffer
	cmd := exec.CommandContext(ctx, python, "-c", script)
	cmd.Stdin, cmd.Stdout, cmd.Stderr = bytes.NewReader(in), &out, &trouble
	// One core, as the fit that it is compared with.
	cmd.Env = append(cmd.Environ(), "OMP_NUM_THREADS=1", "OPENBLAS_NUM_THREADS=1")
	if err := cmd.Run(); err != nil {
		return nil, fmt.Errorf("scipy: %w\n%s", err, trouble.Bytes())
	}
	var results []Result
	if err := json.Unmarshal(out.Bytes(), &results); err != nil {
		return nil, fmt.Errorf("scipy: %w", err)
	}
	if len(results) != len(problems) {
		return nil, fmt.Errorf("scipy: %d results for %d problems", len(results), len(problems))
	}
	return results, nil
}
