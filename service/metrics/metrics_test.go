package metrics

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"net/http"
	"net/http/httptest"
	"os/exec"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"go.uber.org/goleak"

	"example.com/admit/cmd/prove/peer"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

var _ inspection.Observer = (*Metrics)(nil)

func stations(n int) []inspection.Station {
	var all []inspection.Station
	for i := range n {
		all = append(all, inspection.Station{Name: inspection.StationID(fmt.Sprint("N", i+1)), Line: "North"})
	}
	return all
}

func newMetrics(t *testing.T, of []inspection.Station) *Metrics {
	t.Helper()
	m, err := New(Options{Stations: of, Version: "1.0", Revision: "abc"})
	if err != nil {
		t.Fatal(err)
	}
	return m
}

// page returns what a scrape reads.
func page(t *testing.T, m *Metrics) string {
	t.Helper()
	w := httptest.NewRecorder()
	m.Handler().ServeHTTP(w, httptest.NewRequest(http.MethodGet, "/metrics", nil))
	if w.Code != http.StatusOK {
		t.Fatalf("status %d: %s", w.Code, w.Body)
	}
	return w.Body.String()
}

// series returns the names and labels of the page's own series, the buckets of histograms among them.
func series(text string) []string {
	var all []string
	for _, l := range strings.Split(text, "\n") {
		if strings.HasPrefix(l, "admit_") {
			all = append(all, l[:strings.LastIndex(l, " ")])
		}
	}
	slices.Sort(all)
	return all
}

// gathered returns the number of metrics of a registry, a histogram as one.
func gathered(g prometheus.Gatherer) (n int, err error) {
	families, err := g.Gather()
	for _, f := range families {
		n += len(f.GetMetric())
	}
	return n, err
}

// value returns the number of one series of the page.
func value(t *testing.T, text, name string) string {
	t.Helper()
	for _, l := range strings.Split(text, "\n") {
		if v, ok := strings.CutPrefix(l, name+" "); ok {
			return v
		}
	}
	t.Errorf("no series %s", name)
	return ""
}

func record(station, serial string, v verdict.Verdict) *inspection.Record {
	r := &inspection.Record{
		Begin:      inspection.Begin{Station: inspection.StationID(station), Purpose: inspection.Production, Unit: inspection.UnitID{Serial: inspection.Serial(serial), Lot: "L2601"}},
		RecordedAt: time.Date(2026, 11, 30, 9, 12, 44, 5e8, time.UTC),
	}
	r.Judgement.Verdict = v
	r.Judgement.Findings = []verdict.Finding{{Quantity: parttype.MotionalResistance, Outcome: verdict.Conforms}, {Quantity: parttype.QualityFactor, Outcome: verdict.Violates}}
	return r
}

func TestKnownSeriesStandAtZeroFromTheStart(t *testing.T) {
	text := page(t, newMetrics(t, stations(2)))
	for _, name := range []string{
		`admit_inspections_total{station="N1",verdict="pass"}`, `admit_inspections_total{station="N2",verdict="retest"}`, `admit_inspections_total{station="other",verdict="fail"}`,
		`admit_findings_total{outcome="conforms",quantity="motional_resistance"}`, `admit_findings_total{outcome="suspended",quantity="unwanted_mode_suppression"}`,
		`admit_fit_duration_seconds_count`, `admit_verdict_duration_seconds_sum`, `admit_commit_duration_seconds_count`, `admit_commit_batch_size_count`,
		`admit_rejected_total{reason="malformed"}`, `admit_rejected_total{reason="busy"}`, `admit_rejected_total{reason="internal"}`, `admit_rejected_total{reason="conflict"}`,
		`admit_rejected_total{reason="forbidden"}`, `admit_rejected_total{reason="unknown"}`, `admit_rejected_total{reason="unavailable"}`,
		`admit_streams`, `admit_storage_bytes`, `admit_storage_free_bytes`, `admit_last_recorded_timestamp_seconds{station="N1"}`, `admit_oldest_read_seconds`,
		`admit_certificate_expiry_timestamp_seconds`, `admit_certificate_loads_total`, `admit_certificate_load_failures_total`, `admit_storage_recording`,
	} {
		if got := value(t, text, name); got != "0" {
			t.Errorf("%s is %q at the start, want 0", name, got)
		}
	}
	if !strings.Contains(text, `admit_build_info{goversion="go1.`) || !strings.Contains(text, `revision="abc",version="1.0"} 1`) {
		t.Error("no build info")
	}
}

func TestCountersTellWhatHappened(t *testing.T) {
	m := newMetrics(t, stations(2))
	m.Judged(nil, 3*time.Millisecond)
	for range 3 {
		m.Recorded(record("N1", "TM0000001", verdict.Pass), 20*time.Millisecond)
	}
	m.Recorded(record("N2", "TM0000002", verdict.Fail), 30*time.Millisecond)
	m.Recorded(record("S9", "TM0000003", verdict.Retest), 30*time.Millisecond)
	reference := record("N1", "TM0000004", verdict.Fail)
	reference.Begin.Purpose = inspection.Reference
	m.Recorded(reference, 10*time.Millisecond)
	late := record("N1", "TM0000005", verdict.Pass)
	late.RecordedAt = late.RecordedAt.Add(-time.Hour)
	m.Recorded(late, 10*time.Millisecond)
	m.Rejected("N1", inspection.Busy)
	m.Rejected("", inspection.Broken)
	m.Rejected("", inspection.Kind(99))
	m.Committed(4*time.Millisecond, 5)
	m.Seed("N2", time.Unix(1, 0))
	m.Attach(Sources{
		Streams: func() int { return 7 },
		Status: func(context.Context) (inspection.StoreStatus, error) {
			return inspection.StoreStatus{Recording: true, FreeBytes: 1000, Volumes: []inspection.VolumeStatus{{RecordBytes: 1, SampleBytes: 2}, {RecordBytes: 4, SampleBytes: 8}}}, nil
		},
		OldestRead:        func() time.Duration { return 250 * time.Millisecond },
		CertificateExpiry: func() time.Time { return time.Unix(1800000000, 0) },
		CertificateLoads:  func() (uint64, uint64) { return 3, 1 },
	})
	text := page(t, m)
	for name, want := range map[string]string{
		`admit_inspections_total{station="N1",verdict="pass"}`:                    "4",
		`admit_inspections_total{station="N1",verdict="fail"}`:                    "0", // a reference unit is no production
		`admit_inspections_total{station="N2",verdict="fail"}`:                    "1",
		`admit_inspections_total{station="other",verdict="retest"}`:               "1",
		`admit_findings_total{outcome="conforms",quantity="motional_resistance"}`: "6",
		`admit_findings_total{outcome="violates",quantity="quality_factor"}`:      "6",
		`admit_findings_total{outcome="conforms",quantity="quality_factor"}`:      "0",
		`admit_fit_duration_seconds_count`:                                        "1",
		`admit_fit_duration_seconds_bucket{le="0.0025"}`:                          "0",
		`admit_fit_duration_seconds_bucket{le="0.005"}`:                           "1",
		`admit_verdict_duration_seconds_count`:                                    "7",
		`admit_rejected_total{reason="busy"}`:                                     "1",
		`admit_rejected_total{reason="internal"}`:                                 "2",
		`admit_commit_batch_size_sum`:                                             "5",
		`admit_commit_duration_seconds_count`:                                     "1",
		`admit_last_recorded_timestamp_seconds{station="N1"}`:                     "1.7960299645e+09", // date -u -d 2026-11-30T09:12:44Z +%s, and a half
		`admit_streams`:                              "7",
		`admit_storage_bytes`:                        "15",
		`admit_storage_free_bytes`:                   "1000",
		`admit_storage_recording`:                    "1",
		`admit_oldest_read_seconds`:                  "0.25",
		`admit_certificate_expiry_timestamp_seconds`: "1.8e+09",
		`admit_certificate_loads_total`:              "3",
		`admit_certificate_load_failures_total`:      "1",
	} {
		if got := value(t, text, name); got != want {
			t.Errorf("%s is %s, want %s", name, got, want)
		}
	}
}

// A store that does not answer is told as not recording; its sizes are left out rather than told as 0, and the scrape goes on.
func TestStoreThatDoesNotAnswer(t *testing.T) {
	m := newMetrics(t, nil)
	m.Attach(Sources{Status: func(context.Context) (inspection.StoreStatus, error) {
		return inspection.StoreStatus{}, errors.New("no answer")
	}})
	text := page(t, m)
	if value(t, text, "admit_storage_recording") != "0" || strings.Contains(text, "\nadmit_storage_bytes ") || strings.Contains(text, "\nadmit_storage_free_bytes ") {
		t.Error("sizes of a store that does not answer")
	}
}

// Ten thousand units with random serials and lots from listed stations and strange ones add no series (promise P26).
func TestSeriesAreBounded(t *testing.T) {
	for _, c := range []struct {
		name     string
		stations int
		most     int
	}{
		{"eight stations", 8, 500 + 15*8}, {"none listed", 0, 500 + 15*MaxStations},
	} {
		m := newMetrics(t, stations(c.stations))
		unit := func(i int) {
			station := fmt.Sprint("N", 1+rand.IntN(8))
			if i%4 == 0 {
				station = fmt.Sprint("X", rand.Uint64())
			}
			r := record(station, fmt.Sprintf("TM%016x", rand.Uint64()), verdict.Verdicts()[i%3])
			r.Begin.Unit.Lot = inspection.Lot(fmt.Sprintf("L%08x", rand.Uint32()))
			m.Judged(r, time.Millisecond)
			m.Recorded(r, time.Millisecond)
			m.Rejected(r.Begin.Station, inspection.Kind(i%7))
		}
		for i := range 2000 {
			unit(i)
		}
		before := series(page(t, m))
		for i := range 10000 {
			unit(i)
		}
		after := series(page(t, m))
		if !slices.Equal(before, after) {
			t.Errorf("%s: %d series became %d", c.name, len(before), len(after))
		}
		all, err := gathered(m.Gatherer())
		if err != nil {
			t.Fatal(err)
		}
		if len(after) > c.most || all > c.most {
			t.Errorf("%s: %d lines and %d metrics, want at most %d", c.name, len(after), all, c.most)
		}
		if c.stations > 0 && strings.Contains(strings.Join(after, "\n"), `station="X`) {
			t.Error("a strange station has a label")
		}
	}
}

func TestUnlistedStationsGetLabelsUpToTheLimit(t *testing.T) {
	m := newMetrics(t, nil)
	for i := range MaxStations + 50 {
		m.Recorded(record(fmt.Sprint("N", i), "TM0000001", verdict.Pass), 0)
	}
	text := page(t, m)
	if got := value(t, text, `admit_inspections_total{station="other",verdict="pass"}`); got != "50" {
		t.Errorf("other has %s, want 50", got)
	}
	if got := value(t, text, fmt.Sprintf(`admit_inspections_total{station="N%d",verdict="pass"}`, MaxStations-1)); got != "1" {
		t.Errorf("the last with a label has %s, want 1", got)
	}
}

// Scrapes while everything changes: none fails.
func TestScrapesDuringChurn(t *testing.T) {
	m := newMetrics(t, nil)
	stop := make(chan struct{})
	var churn sync.WaitGroup
	for w := range 4 {
		churn.Go(func() {
			for i := 0; ; i++ {
				select {
				case <-stop:
					return
				default:
				}
				m.Recorded(record(fmt.Sprint("N", w, "-", i%300), "TM0000001", verdict.Pass), time.Millisecond)
				m.Rejected("", inspection.Malformed)
				m.Attach(Sources{Streams: func() int { return i }})
			}
		})
	}
	scrapes := 200
	if testing.Short() {
		scrapes = 40
	}
	for range scrapes {
		page(t, m)
	}
	close(stop)
	churn.Wait()
}

// No other registry is touched, and two sets of metrics live side by side.
func TestOwnRegistry(t *testing.T) {
	before, err := gathered(prometheus.DefaultGatherer)
	if err != nil {
		t.Fatal(err)
	}
	a, b := newMetrics(t, nil), newMetrics(t, nil)
	a.Rejected("", inspection.Busy)
	if after, err := gathered(prometheus.DefaultGatherer); err != nil || after != before {
		t.Errorf("the default registry went from %d to %d, %v", before, after, err)
	}
	if value(t, page(t, b), `admit_rejected_total{reason="busy"}`) != "0" {
		t.Error("one counts into the other")
	}
}

// Every quantity of a limits file that the program knows has its series, and no other.
func TestQuantitiesAreComplete(t *testing.T) {
	m := newMetrics(t, nil)
	before := len(series(page(t, m)))
	for _, q := range []string{ // source: the limits file of the design, limits and drive sections, overtones, unwanted modes
		"frequency_deviation_ppm", "motional_resistance", "resonance_resistance", "load_resonance_resistance", "motional_capacitance", "shunt_capacitance",
		"quality_factor", "pulling_sensitivity_ppm_per_pf", "pulling_range_ppm", "start_margin", "drive.resistance_ratio", "drive.motional_resistance",
		"drive.frequency_shift_ppm", "drive.return_shift_ppm", "overtone_suppression", "unwanted_mode_suppression",
	} {
		r := record("N1", "TM0000001", verdict.Pass)
		r.Judgement.Findings = []verdict.Finding{{Quantity: parttype.Quantity(q), Outcome: verdict.Undecided}}
		m.Recorded(r, 0)
		if got := value(t, page(t, m), fmt.Sprintf(`admit_findings_total{outcome="undecided",quantity="%s"}`, q)); got != "1" {
			t.Errorf("%s counted %s, want 1", q, got)
		}
	}
	if after := len(series(page(t, m))); after != before+4 { // station N1: three verdicts and its time
		t.Errorf("%d series became %d, want four more", before, after)
	}
}

func TestPromtoolHasNoComplaint(t *testing.T) {
	tool := peer.Need(t, peer.Promtool)
	m := newMetrics(t, stations(8))
	m.Recorded(record("N1", "TM0000001", verdict.Pass), time.Millisecond)
	m.Judged(nil, time.Millisecond)
	m.Committed(time.Millisecond, 3)
	check := exec.CommandContext(t.Context(), tool, "check", "metrics")
	check.Stdin = strings.NewReader(page(t, m))
	var said bytes.Buffer
	check.Stdout, check.Stderr = &said, &said
	if err := check.Run(); err != nil || said.Len() > 0 {
		t.Errorf("promtool: %v\n%s", err, &said)
	}
}
