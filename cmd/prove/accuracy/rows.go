package accuracy

import (
	"fmt"
	"math"
	"math/rand/v2"

	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/service/resonance"
)

// alternate states the receiver's noise in every other trial, and in every third what the part type would expect. Magnitudes always come with
// an expectation, of which C0 is needed.
func alternate(b *bench, rng *rand.Rand) {
	b.request.NoiseRMS, b.request.Expected = 0, resonance.Expected{}
	if rng.IntN(2) == 0 {
		b.request.NoiseRMS = b.cell.rms
	}
	if b.sweep.Im == nil || rng.IntN(3) == 0 {
		b.request.Expected = b.cell.expected()
	}
}

// spreadTable is a table of spreads, with what the plain figures were at its end.
type spreadTable struct {
	*trial.Table
	report                       *trial.Report
	low, high, least, most, bias float64
}

func newSpreadTable(r *trial.Report, title string, columns ...string) *spreadTable {
	for _, q := range quantities {
		columns = append(columns, q.name+" sd/bound", "bias/sd", "covers %")
	}
	return &spreadTable{Table: r.Table(title, append(columns, "states")...), report: r, low: math.Inf(1), least: math.Inf(1)}
}

// row adds a cell and holds it against the gate; every outcome must be found, or in the other state if that will do as well.
func (t *spreadTable) row(c *cell, outcomes []outcome, g trial.Gate, other resonance.State, labels ...string) {
	cells := make([]any, 0, 20)
	for _, l := range labels {
		cells = append(cells, l)
	}
	for _, q := range quantities {
		s := c.spread(outcomes, q.q)
		cells = append(cells, fmt.Sprintf("%.3f", s.Ratio), fmt.Sprintf("%+.3f", s.Bias), fmt.Sprintf("%.1f", 100*s.Coverage))
		t.low, t.high = math.Min(t.low, s.PlainRatio), math.Max(t.high, s.PlainRatio)
		t.least, t.most = math.Min(t.least, s.PlainCoverage), math.Max(t.most, s.PlainCoverage)
		t.bias = math.Max(t.bias, math.Abs(s.PlainBias))
		if fault := g.Check(s); fault != "" {
			t.report.Fail("%s, %s: %s", c.name, q.name, fault)
		}
	}
	seen := states(outcomes)
	for state, n := range seen {
		if state != resonance.Found && state != other {
			t.report.Fail("%s: state %s in %d of %d trials", c.name, state, n, len(outcomes))
		}
	}
	t.Row(append(cells, fmt.Sprint(seen))...)
}

// Close prints the table and the plain figures.
func (t *spreadTable) Close() {
	t.Table.Close()
	t.report.Printf("without the control variate: sd/bound %.3f to %.3f, |bias| up to %.3f sd, intervals cover %.1f to %.1f %%",
		t.low, t.high, t.bias, 100*t.least, 100*t.most)
}
