package fit

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"strings"

	"example.com/admit/cmd/prove/accuracy"
	"example.com/admit/cmd/prove/accuracy/scipy"
	"example.com/admit/cmd/prove/accuracy/trial"
)

// Options say how long is measured.
type Options struct {
	Seed  uint64
	Quick bool
}

// runs is how often each time is taken; the least counts, so that many short runs find a quiet moment of a busy machine.
func (o Options) runs() int {
	if o.Quick {
		return 12
	}
	return 20
}

func (o Options) benchtime() string {
	if o.Quick {
		return "50x"
	}
	return "0.2s"
}

// row is one line of the table: the ratio of two times and what it must be. A ratio to scipy must be large, one to the plain fit small.
type row struct {
	work        string
	seconds     float64
	of          string
	ratio       float64
	must, reach float64
	large       bool
	allocations float64 // -1: not of concern
}

// Run measures and prints the table. It returns an error if a gate was broken, or scipy.ErrMissing where there is nothing to compare with.
func Run(ctx context.Context, out io.Writer, o Options) error {
	r := trial.NewReport(out)
	r.Printf("seed %d", o.Seed)
	if err := Measure(ctx, o, r); err != nil {
		return err
	}
	if f := r.Failures(); len(f) > 0 {
		return errors.New(strings.Join(f, "\n"))
	}
	return nil
}

// Measure takes the times, prints the table and notes what was broken.
func Measure(ctx context.Context, o Options, r *trial.Report) error {
	own, err := benchmarks(ctx, "service/resonance", "^Benchmark(OneStart|MemoryStart)$", o)
	if err != nil {
		return err
	}
	one, memory := own["OneStart"], own["MemoryStart"]
	if one.seconds == 0 || memory.seconds == 0 {
		return fmt.Errorf("service/resonance has no benchmarks OneStart and MemoryStart; there are %v", own)
	}
	survey, err := benchmarks(ctx, "service/survey", "^BenchmarkSurvey$/points=1601/modes=4/settled", o)
	if err != nil {
		return err
	}
	whole, err := accuracy.WholePath(rand.New(rand.NewPCG(o.Seed, 1)), 20*o.runs())
	if err != nil {
		return err
	}
	rows := []row{
		{"401 points with memory, one start", memory.seconds, "such fits", memory.seconds / one.seconds, 10, 5, false, memory.allocations},
		{"whole path of a main sweep", whole.Seconds(), "such fits", whole.Seconds() / one.seconds, 20, 10, false, -1},
	}
	for name, t := range survey {
		rows = append(rows, row{"survey: " + strings.TrimPrefix(name, "Survey/"), t.seconds, "such fits", t.seconds / one.seconds, 80, 40, false, -1})
	}
	theirs, err := accuracy.ScipySeconds(ctx, rand.New(rand.NewPCG(o.Seed, 2)), 20*o.runs())
	missing := errors.Is(err, scipy.ErrMissing)
	if err != nil && !missing {
		return err
	}
	first := row{"401 points, settled, one start, covariance", one.seconds, "x faster than scipy", theirs.Seconds() / one.seconds, 13, 25, true, one.allocations}
	if missing {
		first.of, first.must = "(not compared: "+err.Error()+")", 0
	}
	print(r, o.slack(), append([]row{first}, rows...))
	r.Printf("scipy.optimize.least_squares, analytic derivative, the same kind of sweep: %.0f us", 1e6*theirs.Seconds())
	return err
}

// slack is by how much a ratio may miss its gate: a test runs on busy machines beside other tests, so the quick form gates at ten times.
func (o Options) slack() float64 {
	if o.Quick {
		return 10
	}
	return 1
}

// print prints the table and holds the rows against their gates.
func print(r *trial.Report, slack float64, rows []row) {
	t := r.Table("The fit, one core", "work", "time us", "ratio", "", "must", "reach for", "allocations")
	defer t.Close()
	for _, w := range rows {
		allocations := "-"
		if w.allocations >= 0 {
			allocations = fmt.Sprintf("%g", w.allocations)
		}
		t.Row(w.work, fmt.Sprintf("%.0f", 1e6*w.seconds), fmt.Sprintf("%.1f", w.ratio), w.of, w.must, w.reach, allocations)
		switch {
		case w.large && !(w.ratio*slack >= w.must):
			r.Fail("%s: %.1f %s, must be %g", w.work, w.ratio, w.of, w.must)
		case !w.large && !(w.ratio <= w.must*slack):
			r.Fail("%s: %.1f %s, must be at most %g", w.work, w.ratio, w.of, w.must)
		}
		if w.allocations > 0 {
			r.Fail("%s: %g allocations, must be none", w.work, w.allocations)
		}
	}
}
