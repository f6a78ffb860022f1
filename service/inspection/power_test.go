package inspection_test

import (
	"fmt"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"example.com/admit/cmd/prove/peer"
	"example.com/admit/cmd/prove/spice"
	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
)

// motional is what ngspice finds at one frequency: the raw transmission, and the power in R1 for a source of one volt.
type motional struct {
	hz, re, im, watt float64
}

// simulate has ngspice sweep a unit in a network between 50 ohm ports, with an ammeter in its motional arm.
func simulate(t *testing.T, kind network.Kind, u crystal.Unit, g sweep.Grid) []motional {
	t.Helper()
	ngspice := peer.Need(t, peer.Ngspice)
	m := u.Modes[0]
	fixture := spice.Network(kind)
	var deck strings.Builder
	fmt.Fprintf(&deck, "power in R1\nV1 src 0 DC 0 AC 1\nRs src in 50\nRl out 0 50\n")
	for i, e := range fixture.Elements {
		fmt.Fprintf(&deck, "%cx%d %s %s %.17g\n", e.Letter, i, e.From, e.To, e.Value)
	}
	fmt.Fprintf(&deck, "R1 %s m1 %.17g\nVm m1 m2 DC 0 AC 0\nL1 m2 m3 %.17g\nC1 m3 %s %.17g\nC0 %s %s %.17g\n",
		fixture.From, m.ResistanceOhm, m.InductanceHenry, fixture.To, m.CapacitanceFarad(), fixture.From, fixture.To, u.ShuntCapacitanceFarad)
	dir := t.TempDir()
	out, file := filepath.Join(dir, "out.txt"), filepath.Join(dir, "deck.cir")
	fmt.Fprintf(&deck, ".control\nset numdgt=16\nac lin %d %.17g %.17g\nwrdata %s v(out) i(vm)\nquit\n.endc\n.end\n", g.Points, g.StartHz, g.StopHz, out)
	if err := os.WriteFile(file, []byte(deck.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	if text, err := exec.Command(ngspice, "-b", file).CombinedOutput(); err != nil {
		t.Fatalf("ngspice: %v\n%s", err, text)
	}
	text, err := os.ReadFile(out)
	if err != nil {
		t.Fatal(err)
	}
	var points []motional
	for line := range strings.Lines(string(text)) {
		var v []float64
		for _, f := range strings.Fields(line) {
			x, err := strconv.ParseFloat(f, 64)
			if err != nil {
				break
			}
			v = append(v, x)
		}
		if len(v) == 6 { // frequency and two parts, for each of the two traces
			points = append(points, motional{v[0], 2 * v[1], 2 * v[2], (v[4]*v[4] + v[5]*v[5]) * m.ResistanceOhm})
		}
	}
	if len(points) != g.Points {
		t.Fatalf("%d points from ngspice, want %d", len(points), g.Points)
	}
	return points
}

// TestPowerAgainstCircuitSimulator: the power in R1 of three units in two networks, at resonance and on its flanks, within 0.1 % of ngspice; and the power
// that a judgement tells of a level, from nothing but the samples that ngspice gives and the source power.
func TestPowerAgainstCircuitSimulator(t *testing.T) {
	oneVolt := 10 * math.Log10(1/(4*50.0)/1e-3) // available power of an EMF of one volt behind 50 ohm
	for _, kind := range []network.Kind{network.PiNetwork, network.SeriesThrough} {
		for _, k := range simulated.Scenario()[1:4] {
			u := k.Nominal()
			m := u.Modes[0]
			width := m.LoadedBandwidthHz(kind.NominalTerminationOhm())
			g := sweep.Grid{StartHz: m.ResonanceHz - 5*width, StopHz: m.ResonanceHz + 5*width, Points: 401}
			points := simulate(t, kind, u, g)
			cal := network.Calibration{Network: kind, ReferenceImpedanceOhm: 50}
			drive, err := cal.Drive()
			if err != nil {
				t.Fatal(err)
			}
			worst, highest := 0.0, 0.0
			w := sweep.Sweep{Role: sweep.Drive, Quantity: sweep.S21, SourcePowerDBm: pointer(oneVolt - 40), Grid: &g}
			for i, p := range points {
				worst = math.Max(worst, math.Abs(drive.PowerWatt(oneVolt, u, g.At(i))/p.watt-1))
				highest = math.Max(highest, p.watt*1e-4)
				w.FrequencyHz, w.Re, w.Im = append(w.FrequencyHz, g.At(i)), append(w.Re, p.re), append(w.Im, p.im)
			}
			if worst > 1e-3 {
				t.Errorf("%s in %s: off by %.1e of ngspice", k.PartType, kind, worst)
			}
			j := powerTold(t, kind, k, w, highest)
			got := j / highest
			t.Logf("%s in %s: worst point %.1e, highest power %.4g W against %.4g W", k.PartType, kind, worst, j, highest)
			if math.Abs(got-1) > 1e-3 {
				t.Errorf("%s in %s: a judgement tells %.6g W, ngspice %.6g W", k.PartType, kind, j, highest)
			}
		}
	}
}

// powerTold judges one drive sweep by the nominal network and returns the power that it tells.
func powerTold(t *testing.T, kind network.Kind, k simulated.Kind, w sweep.Sweep, watt float64) float64 {
	t.Helper()
	p, err := parttype.Parse("x", fmt.Appendf(nil, `part_type: %s
version: 1
vibration_mode: thickness-shear
overtone: 1
nominal_frequency: %g Hz
calibration_required: false
circuit_condition: series-resonance
drive_level: %[3]g W
maximum_drive_level: %[4]g W
limits: {}
drive: {levels: [%[3]g W, %[3]g W], motional_resistance: {max: 1 Mohm}}
`, k.PartType, k.ResonanceHz(), watt, 100*watt))
	if err != nil {
		t.Fatal(err)
	}
	main := w
	main.Role = sweep.Main
	c := inspection.Case{
		Begin:    inspection.Begin{MeasuredAt: measuredAt},
		PartType: p, Calibration: &network.Calibration{Network: kind, ReferenceImpedanceOhm: 50, NominalTerminationOhm: kind.NominalTerminationOhm(), SourceLevelUncertaintyDB: 0.1},
		Sweeps: []sweep.Sweep{w, main},
	}
	j, err := inspection.NewJudge().Judge(t.Context(), &c)
	if err != nil {
		t.Fatal(err)
	}
	if len(j.Drive) != 1 {
		t.Fatal(told(&j))
	}
	return j.Drive[0].PowerWatt.Value
}
