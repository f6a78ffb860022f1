package accuracy

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"time"

	"example.com/admit/cmd/prove/accuracy/scipy"
	"example.com/admit/cmd/prove/accuracy/trial"
)

// proof is one table, or a few that belong together.
type proof struct {
	name string
	run  func(Options, *trial.Report) error
}

// proofs lists all of them.
func proofs() []proof {
	return []proof{
		{"efficiency", Efficiency}, {"lost fits", Lost}, {"far wild points", FarOut}, {"fast sweeps", Fast}, {"timing not stated", Unstated}, {"settling", Settling}, {"real fast sweeps", Measured},
		{"drift", Drift}, {"drift that is named", Named}, {"robustness", Robust}, {"second opinion", SecondOpinion},
	}
}

// missing reports whether an error says that something from outside, a program or the measured sweeps, is not there.
func missing(err error) bool {
	return errors.Is(err, scipy.ErrMissing) || errors.Is(err, fs.ErrNotExist)
}

// Run measures and prints every table. What is missing from outside is named and counted. It returns an error if any gate was broken.
func Run(ctx context.Context, out io.Writer, o Options) error {
	r := trial.NewReport(out)
	r.Printf("seed %d, %d trials a cell", o.Seed, o.Trials)
	skipped := 0
	for _, p := range proofs() {
		if err := ctx.Err(); err != nil {
			return err
		}
		began := time.Now()
		err := p.run(o, r)
		if missing(err) {
			skipped++
			r.Printf("\n%s: skipped: %v", p.name, err)
			continue
		}
		if err != nil {
			return fmt.Errorf("%s: %w", p.name, err)
		}
		r.Printf("(%s took %v)", p.name, time.Since(began).Round(time.Second))
	}
	r.Printf("\n%d of %d proofs skipped, %d gates broken", skipped, len(proofs()), len(r.Failures()))
	for _, f := range r.Failures() {
		r.Printf("FAIL %s", f)
	}
	if n := len(r.Failures()); n > 0 {
		return fmt.Errorf("%d gates broken", n)
	}
	return nil
}
