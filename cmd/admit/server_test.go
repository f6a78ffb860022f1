package main

import (
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"log/slog"
	"math"
	"math/cmplx"
	"net/http"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"sync"
	"testing"
	"time"

	"example.com/admit/cmd/admit/config"
	"example.com/admit/cmd/prove/peer"
	"example.com/admit/cmd/prove/spice"
	"example.com/admit/fixtures/folder"
	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
)

// plant is a running server in a folder.
type plant struct {
	t       *testing.T
	store   string
	server  *server
	cancel  context.CancelFunc
	stopped chan error
}

// start runs a server on the store; the test stops it at its end if it still runs.
func start(t *testing.T, store string) *plant {
	t.Helper()
	c := config.Default()
	c.Store, c.Listen, c.HTTP = store, "127.0.0.1:0", "127.0.0.1:0"
	s, err := build(c, slog.New(slog.NewTextHandler(io.Discard, nil)))
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	p := &plant{t, store, s, cancel, make(chan error, 1)}
	go func() { p.stopped <- s.run(ctx) }()
	t.Cleanup(p.stop)
	return p
}

// stop ends the server and waits for it.
func (p *plant) stop() {
	if p.cancel == nil {
		return
	}
	p.cancel()
	p.cancel = nil
	select {
	case err := <-p.stopped:
		if err != nil {
			p.t.Errorf("the server ended with %v", err)
		}
	case <-time.After(20 * time.Second):
		p.t.Error("the server does not stop")
	}
}

// do runs a command against the plant and returns status and output.
func (p *plant) do(args ...string) (int, string) {
	var out bytes.Buffer
	code := run(p.t.Context(), append(args, "--server", p.server.stations.Addr().String()), streams{strings.NewReader(""), &out, &out})
	return code, out.String()
}

// get fetches a path of the people's side.
func (p *plant) get(path string) (int, string) {
	r, err := http.Get("http://" + p.server.people.Addr().String() + path)
	if err != nil {
		p.t.Fatal(err)
	}
	defer r.Body.Close()
	text, err := io.ReadAll(r.Body)
	if err != nil {
		p.t.Fatal(err)
	}
	return r.StatusCode, string(text)
}

// writeUnit writes a case with an id as a folder.
func writeUnit(t *testing.T, c *inspection.Case, id string) string {
	t.Helper()
	var err error
	if c.Begin.ID, err = inspection.ParseID(id); err != nil {
		t.Fatal(err)
	}
	dir := filepath.Join(t.TempDir(), "unit")
	if err := folder.Write(dir, c); err != nil {
		t.Fatal(err)
	}
	return dir
}

const firstID = "018f3a52-7d3c-7a11-9c55-0123456789ab"

// TestRestartLosesNothing: replay, stop, start, show; replayed again it counts once; what comes out is what went in.
func TestRestartLosesNothing(t *testing.T) {
	store := filepath.Join(t.TempDir(), "store")
	b := newBench(t, 2, 3)
	dir := writeUnit(t, b.measure(simulated.Insert{Unit: b.station.Kind.Nominal()}), firstID)
	p := start(t, store)
	if code, out := p.do("replay", dir); code != exitPass || !strings.Contains(out, "number 1, attempt 1") {
		t.Fatalf("replay: exit %d\n%s", code, out)
	}
	_, before := p.do("show", "--json", firstID)
	p.stop()
	p = start(t, store)
	code, after := p.do("show", "--json", firstID)
	if code != 0 || after != before {
		t.Errorf("after a restart: exit %d, differs\n%s\n%s", code, before, after)
	}
	if code, out := p.do("replay", dir); code != exitPass || !strings.Contains(out, "recorded earlier") {
		t.Errorf("second replay: exit %d\n%s", code, out)
	}
	for _, filter := range [][2]string{{"--serial", "TM0000123"}, {"--lot", "L2601"}, {"--station", "N1"}} {
		if code, out := p.do("show", filter[0], filter[1]); code != 0 || strings.Count(out, firstID) != 1 {
			t.Errorf("show %v: exit %d\n%s", filter, code, out)
		}
	}
	if _, out := p.get("/v1/inspections:count?measured_from=2026-11-30T09:00:00Z&measured_until=2026-11-30T10:00:00Z"); !strings.Contains(out, `"inspections":"1"`) {
		t.Errorf("count: %s", out)
	}
	text := "show as text"
	if code, out := p.do("show", firstID); code != 0 || !strings.Contains(out, "PASS  TM0000123, lot L2601") {
		t.Errorf("%s: exit %d\n%s", text, code, out)
	}
	export := filepath.Join(t.TempDir(), "export")
	if code, out := p.do("show", firstID, "--folder", export); code != 0 {
		t.Fatalf("show --folder: exit %d\n%s", code, out)
	}
	sent, err := folder.Read(dir)
	if err != nil {
		t.Fatal(err)
	}
	kept, err := folder.Read(export)
	if err != nil {
		t.Fatal(err)
	}
	if inspection.ContentHash(&sent.Begin, sent.Sweeps) != inspection.ContentHash(&kept.Begin, kept.Sweeps) ||
		inspection.CalibrationHash(sent.Calibration) != inspection.CalibrationHash(kept.Calibration) || sent.PartType.Hash() != kept.PartType.Hash() {
		t.Error("the exported folder is not what was sent")
	}
}

// TestRefusalsLeaveTheConnectionUsable: the same id with other content, an unknown inspection, a part type that changed; then a good unit.
func TestRefusalsLeaveTheConnectionUsable(t *testing.T) {
	p := start(t, filepath.Join(t.TempDir(), "store"))
	b := newBench(t, 2, 3)
	good := b.measure(simulated.Insert{Unit: b.station.Kind.Nominal()})
	dir := writeUnit(t, good, firstID)
	if code, out := p.do("replay", dir); code != exitPass {
		t.Fatalf("exit %d\n%s", code, out)
	}
	other := b.measure(simulated.Insert{Unit: b.station.Kind.Nominal()}) // new noise
	if code, out := p.do("replay", writeUnit(t, other, firstID)); code != exitBad || !strings.Contains(out, "other content") {
		t.Errorf("other content under one id: exit %d\n%s", code, out)
	}
	if code, out := p.do("show", "018f3a52-7d3c-7a11-9c55-0123456789ff"); code != exitBad {
		t.Errorf("an unknown inspection: exit %d\n%s", code, out)
	}
	changed := b.measure(simulated.Insert{Unit: b.station.Kind.Nominal()})
	part, err := parttype.Parse("part-type.yaml", append(bytes.Clone(changed.PartType.Source), "# changed\n"...))
	if err != nil {
		t.Fatal(err)
	}
	changed.PartType = part
	if code, out := p.do("replay", writeUnit(t, changed, "018f3a52-7d3c-7a11-9c55-0123456789ac")); code != exitBad {
		t.Errorf("another limits file under one version: exit %d\n%s", code, out)
	}
	if code, out := p.do("replay", writeUnit(t, other, "018f3a52-7d3c-7a11-9c55-0123456789ad")); code != exitPass || !strings.Contains(out, "attempt 2") {
		t.Errorf("the next good inspection: exit %d\n%s", code, out)
	}
	if code, out := p.get("/metrics"); code != http.StatusOK || !strings.Contains(out, `admit_inspections_total{station="N1",verdict="pass"} 2`) || !strings.Contains(out, "admit_commit_duration_seconds_count 2") {
		t.Errorf("metrics: %d\n%s", code, out)
	}
	if code, out := p.get("/"); code != http.StatusOK || !strings.Contains(out, "PASS") || !strings.Contains(out, "TM0000123") {
		t.Errorf("page: %d\n%s", code, out)
	}
}

// TestDemoShowsAllVerdicts: within ten seconds of its address the demo has shown a pass, a fail and a retest.
func TestDemoShowsAllVerdicts(t *testing.T) {
	ctx, cancel := context.WithTimeout(t.Context(), 10*time.Second)
	defer cancel()
	out := &watched{found: map[string]bool{}, done: cancel}
	if err := demo(ctx, out, "127.0.0.1:0", 1, 200*time.Millisecond); err != nil {
		t.Fatal(err)
	}
	out.mu.Lock()
	defer out.mu.Unlock()
	for _, v := range []string{"pass", "fail", "retest"} {
		if !out.found[v] {
			t.Errorf("no %s:\n%s", v, out.text.String())
		}
	}
	if strings.Contains(out.text.String(), "stopped:") {
		t.Errorf("a station stopped:\n%s", out.text.String())
	}
}

// watched collects output and calls done when all three verdicts were seen.
type watched struct {
	mu    sync.Mutex
	text  strings.Builder
	found map[string]bool
	done  func()
}

func (w *watched) Write(p []byte) (int, error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.text.Write(p)
	if fields := strings.Fields(string(p)); len(fields) > 1 {
		w.found[fields[1]] = true
	}
	if w.found["pass"] && w.found["fail"] && w.found["retest"] {
		w.done()
	}
	return len(p), nil
}

// TestChainAgainstCircuitSimulator: ngspice computes what the five units of the scenario show in their networks, standards included; file ->
// gRPC -> fit -> stored record returns R1, L1, C1, C0 within 1e-4 and fs within 0.01 ppm.
func TestChainAgainstCircuitSimulator(t *testing.T) {
	peer.Need(t, peer.Ngspice)
	p := start(t, filepath.Join(t.TempDir(), "store"))
	for i, k := range simulated.Scenario() {
		unit := k.Nominal()
		m := unit.Modes[0]
		fixture := spice.Network(k.Network)
		b := newBench(t, i, 1)
		g := b.station.Window(401)
		c := b.unit
		cal := *c.Calibration
		cal.ReceiverNoise, cal.Standards = nil, nil
		termination := k.TerminationOhm()
		for _, s := range []struct {
			kind  network.StandardKind
			ohm   float64
			parts []spice.Element
		}{
			{network.Open, 0, nil},
			{network.Short, 0, spice.Short(fixture.From, fixture.To)},
			{network.Load, termination, spice.Resistor(fixture.From, fixture.To, termination)},
		} {
			standard := network.Standard{Kind: s.kind, ResistanceOhm: s.ohm}
			for _, point := range spice.Sweep(t, fixture, s.parts, g.StartHz, g.StopHz, 21) {
				standard.FrequencyHz = append(standard.FrequencyHz, point.FrequencyHz)
				standard.Re, standard.Im = append(standard.Re, point.Re), append(standard.Im, point.Im)
			}
			cal.Standards = append(cal.Standards, standard)
		}
		c.Calibration = &cal
		w := sweep.Sweep{Role: sweep.Main, Quantity: sweep.S21}
		parts := spice.Crystal(fixture.From, fixture.To, m.ResistanceOhm, m.InductanceHenry, m.CapacitanceFarad(), unit.ShuntCapacitanceFarad)
		for _, point := range spice.Sweep(t, fixture, parts, g.StartHz, g.StopHz, g.Points) {
			w.FrequencyHz = append(w.FrequencyHz, point.FrequencyHz)
			w.Re, w.Im = append(w.Re, point.Re), append(w.Im, point.Im)
		}
		c.Sweeps = []sweep.Sweep{w}
		cal.ID = fmt.Sprintf("N1-A-%d", i)
		c.Begin.Calibration = inspection.CalibrationID(cal.ID)
		id := fmt.Sprintf("018f3a52-7d3c-7a11-9c55-0123456789%02d", i)
		if code, out := p.do("replay", writeUnit(t, &c, id)); code != exitPass {
			t.Errorf("%s: exit %d\n%s", k.PartType, code, out)
		}
		recovered(t, k.PartType, p, id, unit)
	}
}

// recovered compares a stored record with the unit that was simulated.
func recovered(t *testing.T, name string, p *plant, id string, unit crystal.Unit) {
	t.Helper()
	code, out := p.do("show", "--json", id)
	if code != 0 {
		t.Errorf("%s: show: exit %d\n%s", name, code, out)
		return
	}
	var r struct{ Judgement judgement }
	if err := json.Unmarshal([]byte(out), &r); err != nil {
		t.Fatal(err)
	}
	compare(t, name, &r.Judgement, unit)
}

// compare holds a judgement's main quantities against a unit: 1e-4, and 0.01 ppm for fs.
func compare(t *testing.T, name string, j *judgement, unit crystal.Unit) {
	t.Helper()
	m := unit.Modes[0]
	for _, c := range []struct {
		name      string
		want, tol float64
	}{
		{"motionalResonanceHz", m.ResonanceHz, 1e-8}, {"motionalResistanceOhm", m.ResistanceOhm, 1e-4}, {"motionalInductanceH", m.InductanceHenry, 1e-4},
		{"motionalCapacitanceF", m.CapacitanceFarad(), 1e-4}, {"shuntCapacitanceF", unit.ShuntCapacitanceFarad, 1e-4},
	} {
		got := j.Main[c.name].Value
		e := got/c.want - 1
		t.Logf("%s: %s off by %.1e", name, c.name, e)
		if !(math.Abs(e) <= c.tol) {
			t.Errorf("%s: %s %.12g, want %.12g: off by %.2e, want within %.0e", name, c.name, got, c.want, e, c.tol)
		}
	}
}

// TestPublishedUnitsComeBack: units whose parameters were published, simulated without noise in the network that suits their resistance, come
// back from the files through the fit.
func TestPublishedUnitsComeBack(t *testing.T) {
	for _, u := range publishedUnits(t) {
		name, unit := u.name, u.unit
		m := unit.Modes[0]
		kind, fixture := network.PiNetwork, simulated.PiFixture()
		if m.ResistanceOhm > 1000 {
			kind, fixture = network.HighImpedance, simulated.HighImpedanceFixture()
		}
		half := 5 * m.LoadedBandwidthHz(kind.NominalTerminationOhm())
		g := sweep.Grid{StartHz: m.ResonanceHz - half, StopHz: m.ResonanceHz + half, Points: 401}
		w := sweep.Sweep{Role: sweep.Main, Quantity: sweep.S21, Grid: &g}
		for i := range g.Points {
			f := g.At(i)
			v := fixture.Sample(f, unit.Impedance(f))
			w.FrequencyHz, w.Re, w.Im = append(w.FrequencyHz, f), append(w.Re, real(v)), append(w.Im, imag(v))
		}
		cal := network.Calibration{ID: "c", ContactHead: "N1-A", Network: kind, ReferenceImpedanceOhm: 50, NominalTerminationOhm: kind.NominalTerminationOhm(),
			TakenAt: measuredAt.Add(-time.Hour), ValidFor: 24 * time.Hour}
		for _, s := range []struct {
			kind network.StandardKind
			ohm  float64
			put  complex128
		}{{network.Open, 0, cmplx.Inf()}, {network.Short, 0, 0}, {network.Load, kind.NominalTerminationOhm(), complex(kind.NominalTerminationOhm(), 0)}} {
			standard := network.Standard{Kind: s.kind, ResistanceOhm: s.ohm}
			for i := range 21 {
				f := sweep.Grid{StartHz: g.StartHz, StopHz: g.StopHz, Points: 21}.At(i)
				v := fixture.Sample(f, s.put)
				standard.FrequencyHz, standard.Re, standard.Im = append(standard.FrequencyHz, f), append(standard.Re, real(v)), append(standard.Im, imag(v))
			}
			cal.Standards = append(cal.Standards, standard)
		}
		part, err := parttype.Parse("part-type.yaml", []byte(fmt.Sprintf(openPartType, 1, m.ResonanceHz)))
		if err != nil {
			t.Fatal(err)
		}
		c := newBench(t, 2, 1).unit
		c.PartType, c.Calibration, c.Sweeps = part, &cal, []sweep.Sweep{w}
		c.Begin.PartType, c.Begin.Calibration = inspection.PartTypeRef{Name: part.Name, Version: 1}, "c"
		code, j := judgeJSON(t, writeUnit(t, &c, firstID))
		if code != exitPass {
			t.Errorf("%s: exit %d %+v", name, code, j.RetestCauses)
			continue
		}
		compare(t, name, &j, unit)
	}
}

// publishedUnit is one unit whose four parameters stand in a public text.
type publishedUnit struct {
	name string
	unit crystal.Unit
}

// publishedUnits reads the rows with basis published and all of R1, L1, C1, C0.
func publishedUnits(t *testing.T) []publishedUnit {
	t.Helper()
	files, err := filepath.Glob(peer.Testdata("published_crystals", "*.csv"))
	if err != nil || len(files) != 1 {
		t.Fatalf("testdata/published_crystals: %v (%v)", files, err)
	}
	f, err := os.Open(files[0])
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	column := map[string]int{}
	for i, name := range rows[0] {
		column[name] = i
	}
	var out []publishedUnit
	for _, row := range rows[1:] {
		if row[column["basis"]] != "published" {
			continue
		}
		var v [4]float64
		whole := true
		for i, name := range []string{"r1_ohm", "l1_h", "c1_f", "c0_f"} {
			if v[i], err = strconv.ParseFloat(row[column[name]], 64); err != nil {
				whole = false
			}
		}
		if whole {
			out = append(out, publishedUnit{row[column["name"]], crystal.Unit{
				Modes: []crystal.Mode{crystal.ModeFromInductanceCapacitance(v[0], v[1], v[2])}, ShuntCapacitanceFarad: v[3],
			}})
		}
	}
	if len(out) < 10 {
		t.Fatalf("only %d published units", len(out))
	}
	return out
}

// TestPublish: files become known, are known already the second time, and a bad one is refused with its faults.
func TestPublish(t *testing.T) {
	p := start(t, filepath.Join(t.TempDir(), "store"))
	b := newBench(t, 2, 3)
	dir := writeUnit(t, b.measure(simulated.Insert{Unit: b.station.Kind.Nominal()}), firstID)
	for _, want := range []string{": published", ": known already"} {
		for _, c := range [][2]string{{"part-type", "part-type.yaml"}, {"calibration", "calibration.yaml"}} {
			if code, out := p.do("publish", c[0], filepath.Join(dir, c[1])); code != 0 || !strings.Contains(out, want) {
				t.Errorf("publish %s: exit %d, %s", c[0], code, out)
			}
		}
	}
	broken := filepath.Join(dir, "broken.yaml")
	if err := os.WriteFile(broken, []byte("part_type: X\nversion: 0\nweather: fine\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	if code, out := p.do("publish", "part-type", broken); code != exitBad || !strings.Contains(out, "weather") || !strings.Contains(out, "version") {
		t.Errorf("a broken limits file: exit %d, %s", code, out)
	}
	if code, out := p.do("publish", "calibration", filepath.Join(dir, "nothing.yaml")); code != exitBad {
		t.Errorf("no such file: exit %d, %s", code, out)
	}
}
