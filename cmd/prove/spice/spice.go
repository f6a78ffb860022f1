// Package spice has ngspice, an outside circuit simulator, compute what a fixture would measure of a crystal unit: the referee for the
// program's own circuit analysis and fit.
package spice

import (
	"bufio"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"example.com/admit/cmd/prove/peer"
	"example.com/admit/service/network"
)

// Element is one part between two nodes: a SPICE element line's letter and value. R in ohm, L in henry, C in farad, V in volt.
type Element struct {
	Letter   byte // 'R', 'L', 'C' or 'V'
	From, To string
	Value    float64
}

// Crystal returns the elements of a one-mode crystal unit between two nodes.
func Crystal(from, to string, resistanceOhm, inductanceHenry, capacitanceFarad, shuntFarad float64) []Element {
	return []Element{
		{'R', from, "m1", resistanceOhm}, {'L', "m1", "m2", inductanceHenry}, {'C', "m2", to, capacitanceFarad},
		{'C', from, to, shuntFarad},
	}
}

// Resistor returns a single resistor between two nodes: a standard.
func Resistor(from, to string, ohm float64) []Element { return []Element{{'R', from, to, ohm}} }

// Short returns an ideal short between two nodes: a source of 0 volt, because a tiny resistor spoils the simulator's own precision.
func Short(from, to string) []Element { return []Element{{'V', from, to, 0}} }

// Fixture is a fixture network between the nodes in and out: its elements, and the two nodes between which the unit lies. In a
// reflection fixture the receiver is at the source's port.
type Fixture struct {
	Elements   []Element
	From, To   string
	Reflection bool
}

// Network returns the ideal fixture of a kind.
func Network(kind network.Kind) Fixture {
	switch kind {
	case network.PiNetwork:
		return Fixture{Elements: []Element{
			{'R', "in", "0", 159}, {'R', "in", "a", 66.2}, {'R', "a", "0", 14.2},
			{'R', "b", "0", 14.2}, {'R', "b", "out", 66.2}, {'R', "out", "0", 159},
		}, From: "a", To: "b"}
	case network.HighImpedance:
		return Fixture{Elements: []Element{
			{'R', "in", "0", 50}, {'R', "in", "a", 9975}, {'R', "b", "out", 9975}, {'R', "out", "0", 50},
		}, From: "a", To: "b"}
	case network.Reflection:
		return Fixture{From: "in", To: "0", Reflection: true}
	}
	return Fixture{From: "in", To: "out"}
}

// Point is the raw sample S21 (or S11 of a reflection fixture) at one frequency.
type Point struct{ FrequencyHz, Re, Im float64 }

// Sweep runs an AC analysis over a linear grid between 50 ohm ports and returns the samples.
func Sweep(t testing.TB, fixture Fixture, unit []Element, startHz, stopHz float64, points int) []Point {
	t.Helper()
	ngspice := peer.Need(t, peer.Ngspice)
	dir := t.TempDir()
	receiver := "out"
	var deck strings.Builder
	fmt.Fprintf(&deck, "fixture\nV1 src 0 DC 0 AC 1\nRs src in 50\n")
	if fixture.Reflection {
		receiver = "in"
	} else {
		fmt.Fprintf(&deck, "Rl out 0 50\n")
	}
	for i, e := range append(slices.Clone(fixture.Elements), unit...) {
		fmt.Fprintf(&deck, "%cx%d %s %s %.17g\n", e.Letter, i, e.From, e.To, e.Value)
	}
	out := filepath.Join(dir, "out.txt")
	fmt.Fprintf(&deck, ".control\nset numdgt=16\nset wr_vecnames\nac lin %d %.17g %.17g\nwrdata %s v(%s)\nquit\n.endc\n.end\n", points, startHz, stopHz, out, receiver)
	file := filepath.Join(dir, "deck.cir")
	if err := os.WriteFile(file, []byte(deck.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command(ngspice, "-b", file)
	if text, err := cmd.CombinedOutput(); err != nil {
		t.Fatalf("ngspice: %v\n%s", err, text)
	}
	return read(t, out, fixture.Reflection)
}

// read parses ngspice's table: frequency, real and imaginary part of the voltage for a source of 1 V.
func read(t testing.TB, path string, reflection bool) []Point {
	t.Helper()
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	var points []Point
	for scan := bufio.NewScanner(f); scan.Scan(); {
		fields := strings.Fields(scan.Text())
		if len(fields) != 3 {
			continue
		}
		var v [3]float64
		for i := range v {
			if v[i], err = strconv.ParseFloat(fields[i], 64); err != nil {
				break
			}
		}
		if err != nil {
			err = nil
			continue // the line of vector names
		}
		re, im := 2*v[1], 2*v[2]
		if reflection {
			re-- // S11 = 2 V/E - 1
		}
		points = append(points, Point{v[0], re, im})
	}
	return points
}
