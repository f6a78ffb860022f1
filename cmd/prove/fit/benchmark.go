package fit

import (
	"bytes"
	"context"
	"fmt"
	"math"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"

	"example.com/admit/cmd/prove/peer"
)

// timed is what a benchmark says of one operation.
type timed struct {
	seconds     float64
	allocations float64
}

// benchmarks runs the benchmarks of a package that match the pattern and returns the fastest run of each by its name, without prefix and
// number of cores. What is not reachable from outside a package, such as a fit from one given start, is measured by its own benchmarks.
func benchmarks(ctx context.Context, folder, pattern string, o Options) (map[string]timed, error) {
	cmd := exec.CommandContext(ctx, "go", "test", "-run", "^$", "-bench", pattern, "-benchmem", "-cpu", "1",
		"-count", strconv.Itoa(o.runs()), "-benchtime", o.benchtime(), "./"+folder)
	cmd.Dir = filepath.Dir(peer.Testdata())
	var out, trouble bytes.Buffer
	cmd.Stdout, cmd.Stderr = &out, &trouble
	if err := cmd.Run(); err != nil {
		return nil, fmt.Errorf("benchmarks of %s: %w\n%s%s", folder, err, out.Bytes(), trouble.Bytes())
	}
	found := map[string]timed{}
	for line := range strings.Lines(out.String()) {
		name, t, ok := parse(line)
		if !ok {
			continue
		}
		if before, again := found[name]; again {
			t.seconds = math.Min(t.seconds, before.seconds)
			t.allocations = math.Max(t.allocations, before.allocations)
		}
		found[name] = t
	}
	return found, nil
}

// parse reads a line such as "BenchmarkOneStart   26544   45071 ns/op   4.000 evaluations   0 B/op   0 allocs/op".
func parse(line string) (name string, t timed, ok bool) {
	fields := strings.Fields(line)
	if len(fields) < 4 || !strings.HasPrefix(fields[0], "Benchmark") {
		return "", t, false
	}
	for i := 2; i+1 < len(fields); i += 2 {
		v, err := strconv.ParseFloat(fields[i], 64)
		if err != nil {
			return "", t, false
		}
		switch fields[i+1] {
		case "ns/op":
			t.seconds, ok = v*1e-9, true
		case "allocs/op":
			t.allocations = v
		}
	}
	return strings.TrimPrefix(fields[0], "Benchmark"), t, ok
}
