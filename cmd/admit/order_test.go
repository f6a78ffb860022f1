package main

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"example.com/admit/cmd/prove/peer"
	"example.com/admit/fixtures/folder"
	"example.com/admit/fixtures/simulated"
)

// order is what the tests read of the JSON form.
type order struct {
	Order       int
	Probability float64
	Candidates  []struct {
		Order       int
		Probability float64
	}
	Responses []struct {
		Order                                        int
		FrequencyHz, MultipleRatio, CapacitanceShare struct{ Value, StandardUncertainty float64 }
	}
	Text string
}

// orderJSON runs `admit order --json`.
func orderJSON(t *testing.T, dir string) (int, order, string) {
	t.Helper()
	var out, errs strings.Builder
	code := run(t.Context(), []string{"order", "--json", dir}, streams{strings.NewReader(""), &out, &errs})
	var o order
	if code == exitPass {
		if err := json.Unmarshal([]byte(out.String()), &o); err != nil {
			t.Fatalf("not JSON: %v\n%s", err, out.String())
		}
	}
	return code, o, errs.String()
}

// TestOrderOfBareDiscs: each of the responses of a bare disc, taken for the main one, is told to be of order 1, 3 or 5, although the capacitance of
// cell and cable stands in for C0; and n^2 Cn/C1 is within a fifth of 1, as a plate has it.
func TestOrderOfBareDiscs(t *testing.T) {
	orders := []int{1, 3, 5}
	// With one overtone alone 1 and 3 might as well be 3 and 9, and the capacitance of the cell speaks for that: what makers offer at 5 MHz decides.
	dir := writeFolder(t, peer.Shared(t, "data", "measured", "at-cut-5mhz-disc-1-bare-air-n1.s1p"), "s11", fmt.Sprintf(openPartType, 1, 5e6), nominalReflection)
	addWindow(t, dir, peer.Shared(t, "data", "measured", "at-cut-5mhz-disc-1-bare-air-n3.s1p"), 3)
	if code, o, errs := orderJSON(t, dir); code != exitPass || o.Order != 1 || o.Probability < 0.7 {
		t.Errorf("one overtone alone: exit %d, %+v %s", code, o, errs)
	}
	for disc := 1; disc <= 2; disc++ {
		file := func(n int) string {
			return peer.Shared(t, "data", "measured", fmt.Sprintf("at-cut-5mhz-disc-%d-bare-air-n%d.s1p", disc, n))
		}
		for _, main := range orders {
			dir := writeFolder(t, file(main), "s11", fmt.Sprintf(openPartType, main, 5e6*float64(main)), nominalReflection)
			for _, n := range orders {
				if n != main {
					addWindow(t, dir, file(n), n)
				}
			}
			code, o, errs := orderJSON(t, dir)
			if code != exitPass || o.Order != main || o.Probability < 0.8 || len(o.Responses) != 3 {
				t.Errorf("disc %d, order %d: exit %d, %+v %s", disc, main, code, o, errs)
				continue
			}
			t.Logf("disc %d: %s", disc, o.Text)
			for _, r := range o.Responses {
				if n := math.Round(r.FrequencyHz.Value / 5e6); float64(r.Order) != n {
					t.Errorf("disc %d: the response at %.0f Hz has order %d, want %g", disc, r.FrequencyHz.Value, r.Order, n)
				}
				if r.Order > 1 && math.Abs(r.CapacitanceShare.Value-1) > 0.2 {
					t.Errorf("disc %d: n^2 Cn/C1 of order %d is %.3f, want within a fifth of 1", disc, r.Order, r.CapacitanceShare.Value)
				}
				if r.Order > 1 && math.Abs(r.MultipleRatio.Value-1) > 0.005 {
					t.Errorf("disc %d: fn/(n f1) of order %d is %.6f", disc, r.Order, r.MultipleRatio.Value)
				}
			}
		}
	}
}

// addWindow adds an overtone window to an inspection folder.
func addWindow(t *testing.T, dir, file string, n int) {
	t.Helper()
	text, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	name := fmt.Sprintf("overtone-%d.s1p", n)
	if err := os.WriteFile(filepath.Join(dir, name), text, 0o600); err != nil {
		t.Fatal(err)
	}
	item := fmt.Sprintf("  - {file: %s, role: overtone, order: %d, quantity: s11}\n", name, n)
	if err := edit(dir, "inspection.yaml", func(s string) string { return s + item }); err != nil {
		t.Fatal(err)
	}
}

// TestOrderOfTheScenario: packaged units are told by the ratio of their capacitances alone, the higher the order, the less surely.
func TestOrderOfTheScenario(t *testing.T) {
	for kind, want := range map[int]struct {
		order       int
		probability float64
	}{1: {1, 0.999}, 2: {1, 0.999}, 3: {3, 0.9}, 4: {5, 0.7}} {
		b := newBench(t, kind, 3)
		dir := filepath.Join(t.TempDir(), "unit")
		if err := folder.Write(dir, b.measure(simulated.Insert{Unit: b.station.Kind.Nominal()})); err != nil {
			t.Fatal(err)
		}
		code, o, errs := orderJSON(t, dir)
		sum := 0.0
		for _, c := range o.Candidates {
			sum += c.Probability
		}
		if code != exitPass || o.Order != want.order || o.Probability < want.probability || math.Abs(sum-1) > 1e-9 {
			t.Errorf("%s: exit %d, %+v %s", b.station.Kind.PartType, code, o, errs)
		}
		var out strings.Builder
		if code := run(t.Context(), []string{"order", dir}, streams{strings.NewReader(""), &out, &out}); code != exitPass || !strings.Contains(out.String(), "with a probability of") {
			t.Errorf("as text: exit %d, %s", code, out.String())
		}
	}
}

// TestOrderThatCannotBeTold: a bending bar, and a folder that is none.
func TestOrderThatCannotBeTold(t *testing.T) {
	b := newBench(t, 0, 3)
	dir := filepath.Join(t.TempDir(), "unit")
	if err := folder.Write(dir, b.measure(simulated.Insert{Unit: b.station.Kind.Nominal()})); err != nil {
		t.Fatal(err)
	}
	if code, _, errs := orderJSON(t, dir); code != exitTrouble || !strings.Contains(errs, "cannot be told") {
		t.Errorf("a tuning fork: exit %d, %s", code, errs)
	}
	if code, _, _ := orderJSON(t, filepath.Join(dir, "nothing")); code != exitBad {
		t.Errorf("no folder: exit %d", code)
	}
}
