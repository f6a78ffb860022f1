package accuracy

import (
	"errors"
	"flag"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"os"
	"strconv"
	"strings"
	"testing"

	"example.com/admit/cmd/prove/accuracy/scipy"
	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/bound"
	"example.com/admit/cmd/prove/peer"
	"example.com/admit/service/sweep"
)

var seedFlag = flag.Uint64("seed", 0, "seed of the random numbers; 0: ADMIT_SEED, or a new one")

// seed returns the seed of this run, and prints it.
func seed(t *testing.T) uint64 {
	s := *seedFlag
	if s == 0 {
		s, _ = strconv.ParseUint(os.Getenv("ADMIT_SEED"), 10, 64)
	}
	if s == 0 {
		s = rand.Uint64()
	}
	t.Logf("seed %d", s)
	return s
}

// lines prints to a test's log, a line at a time.
type lines struct {
	t    *testing.T
	rest string
}

func (l *lines) Write(p []byte) (int, error) {
	l.rest += string(p)
	for {
		line, after, found := strings.Cut(l.rest, "\n")
		if !found {
			return len(p), nil
		}
		l.t.Log(line)
		l.rest = after
	}
}

// prove runs one proof in its quick form; with -short, fewer cells and trials.
func prove(t *testing.T, proof func(Options, *trial.Report) error) {
	t.Helper()
	o := Options{Seed: seed(t), Trials: 1000, Short: testing.Short()}
	if o.Short {
		o.Trials = 200
	}
	r := trial.NewReport(&lines{t: t})
	err := proof(o, r)
	if missing(err) && !(errors.Is(err, scipy.ErrMissing) && peer.Required()) {
		t.Skipf("skipped: %v", err)
	}
	if err != nil {
		t.Fatal(err)
	}
	for _, f := range r.Failures() {
		t.Error(f)
	}
}

func TestEfficiency(t *testing.T)    { prove(t, Efficiency) }
func TestLost(t *testing.T)          { prove(t, Lost) }
func TestFast(t *testing.T)          { prove(t, Fast) }
func TestSettling(t *testing.T)      { prove(t, Settling) }
func TestMeasured(t *testing.T)      { prove(t, Measured) }
func TestNamed(t *testing.T)         { prove(t, Named) }
func TestRobust(t *testing.T)        { prove(t, Robust) }
func TestSecondOpinion(t *testing.T) { prove(t, SecondOpinion) }

// TestModelsAgree holds the two forward models that the proofs rest on against each other: that of the bound and the simulated physics.
func TestModelsAgree(t *testing.T) {
	for _, p := range scenario() {
		rows := append(Options{}.fastRows(), fastRow{note: "settled", points: 401})
		for _, f := range rows {
			c, err := f.secondOpinion(p, 60)
			if err != nil {
				t.Fatal(err)
			}
			worst := 0.0
			for i, v := range c.limit.Clean() {
				worst = math.Max(worst, cmplx.Abs(v-c.clean[i])/p.response())
			}
			if !(worst < 1e-8) {
				t.Errorf("%s: the samples of the two models are %.1e of the response apart", c.name, worst)
			}
		}
	}
}

// TestGatesGoRed breaks a fit on purpose, by keeping the timing of a fast sweep from it, and its uncertainty, by halving it: both must break the gates.
func TestGatesGoRed(t *testing.T) {
	o := Options{Seed: seed(t), Trials: 100}
	c, err := fastRow{points: 401, dwell: 5, averaging: 0.2}.cell(scenario()[2], 60)
	if err != nil {
		t.Fatal(err)
	}
	plain := c.measure(o, false, func(b *bench, _ *rand.Rand) { b.sweep.Timing = sweep.Timing{Phase: sweep.PhaseRestarted} })
	if fault := trial.Quick.Check(c.spread(plain, bound.ResonanceHz)); fault == "" {
		t.Error("a fit without memory passes the gates at a dwell of five time constants")
	}
	outcomes := c.measure(o, false, nil)
	for i := range outcomes {
		outcomes[i].readings[bound.ResistanceOhm].Deviation /= 2
	}
	if fault := trial.Quick.Check(c.spread(outcomes, bound.ResistanceOhm)); fault == "" {
		t.Error("half the standard uncertainty passes the gates")
	}
}
