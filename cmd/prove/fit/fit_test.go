package fit

import (
	"errors"
	"math/rand/v2"
	"strings"
	"testing"

	"example.com/admit/cmd/prove/accuracy/scipy"
	"example.com/admit/cmd/prove/accuracy/trial"
	"example.com/admit/cmd/prove/peer"
)

// TestSpeed is the quick form of the table, gated at ten times the figures.
func TestSpeed(t *testing.T) {
	var out strings.Builder
	r := trial.NewReport(&out)
	o := Options{Seed: rand.Uint64(), Quick: true}
	err := Measure(t.Context(), o, r)
	t.Logf("seed %d\n%s", o.Seed, out.String())
	if errors.Is(err, scipy.ErrMissing) && !peer.Required() {
		t.Skipf("skipped: %v", err)
	}
	if err != nil {
		t.Fatal(err)
	}
	if f := r.Failures(); len(f) > 0 {
		t.Fatal(strings.Join(f, "\n"))
	}
}

func TestParse(t *testing.T) {
	name, got, ok := parse("BenchmarkOneStart   26544   45071 ns/op   4.000 evaluations   16 B/op   2 allocs/op\n")
	if want := (timed{45071e-9, 2}); !ok || name != "OneStart" || got.allocations != want.allocations || got.seconds/want.seconds-1 > 1e-12 {
		t.Errorf("%q %v %v, want OneStart %v", name, got, ok, want)
	}
	for _, line := range []string{"PASS", "goos: linux", "ok  \texample.com/x\t0.2s", "BenchmarkX 1 y ns/op", ""} {
		if _, _, ok := parse(line); ok {
			t.Errorf("%q was read as a benchmark", line)
		}
	}
}
