// Package metrics says by numbers how the service fares, in the form that Prometheus reads. It listens to inspections as an
// inspection.Observer and asks the rest ([Sources]) when it is read. It has a registry of its own and knows nothing of how inspections
// come in or where they are kept.
//
// Labels are bounded: stations are those of the configuration, or the first MaxStations that were heard of where it lists none, and the
// rest is "other"; verdicts, quantities, outcomes and reasons are closed sets. No serial, lot, id, user or text is ever a label. Every
// series that is known beforehand exists from the start with 0, so that a rate over the first event is seen.
//
// Inspections and findings count production only, as yields do; durations are of every inspection.
package metrics

import (
	"net/http"
	"runtime"
	"sync"
	"sync/atomic"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/collectors"
	"github.com/prometheus/client_golang/prometheus/promhttp"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
)

// MaxStations bounds the stations that have a label of their own where the configuration lists none.
const MaxStations = 200

// other is the label of every station beyond.
const other = "other"

// Options are what the numbers are about.
type Options struct {
	Stations          []inspection.Station // none: names are taken as they come, up to MaxStations
	Version, Revision string               // of the program
}

// Metrics holds the numbers. It is safe for concurrent use and never blocks.
type Metrics struct {
	registry *prometheus.Registry
	sources  atomic.Pointer[Sources]

	inspections  *prometheus.CounterVec
	findings     *prometheus.CounterVec
	rejected     *prometheus.CounterVec
	lastRecorded *prometheus.GaugeVec
	fit          prometheus.Histogram
	verdict      prometheus.Histogram
	commit       prometheus.Histogram
	batch        prometheus.Histogram

	mu       sync.Mutex
	stations map[inspection.StationID]bool // with a label of their own
	listed   bool
	newest   map[string]float64 // last_recorded of each label, which must not go back
}

// durations are buckets about the target: a verdict within tens of milliseconds, nothing above ten seconds.
var durations = []float64{0.0005, 0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1, 2.5, 10}

// New returns metrics with every known series at 0.
func New(o Options) (*Metrics, error) {
	m := &Metrics{
		registry: prometheus.NewRegistry(),
		inspections: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "admit_inspections_total", Help: "Production inspections recorded, each attempt counted once, by station and verdict.",
		}, []string{"station", "verdict"}),
		findings: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "admit_findings_total", Help: "Limits held against production units, by quantity of the limits file and outcome.",
		}, []string{"quantity", "outcome"}),
		rejected: prometheus.NewCounterVec(prometheus.CounterOpts{
			Name: "admit_rejected_total", Help: "Inspections and calls refused, by kind of reason.",
		}, []string{"reason"}),
		lastRecorded: prometheus.NewGaugeVec(prometheus.GaugeOpts{
			Name: "admit_last_recorded_timestamp_seconds", Help: "When the newest inspection of the station was recorded, Unix time; 0: none known.",
		}, []string{"station"}),
		fit:     histogram("admit_fit_duration_seconds", "Time taken to judge one inspection: correction, fit and verdict.", durations),
		verdict: histogram("admit_verdict_duration_seconds", "Time from the last sample of an inspection until it is recorded.", durations),
		commit:  histogram("admit_commit_duration_seconds", "Time of one commit of the store, until it is on disk.", durations),
		batch:   histogram("admit_commit_batch_size", "Inspections that share one commit of the store.", []float64{1, 2, 4, 8, 16, 32, 64, 128, 256}),

		stations: map[inspection.StationID]bool{}, listed: len(o.Stations) > 0, newest: map[string]float64{},
	}
	m.sources.Store(&Sources{})
	build := prometheus.NewGaugeVec(prometheus.GaugeOpts{
		Name: "admit_build_info", Help: "Always 1; the program's version, revision and Go version are its labels.",
	}, []string{"version", "revision", "goversion"})
	build.WithLabelValues(o.Version, o.Revision, runtime.Version()).Set(1)
	for _, c := range []prometheus.Collector{
		m.inspections, m.findings, m.rejected, m.lastRecorded, m.fit, m.verdict, m.commit, m.batch, build, &gauges{m},
		collectors.NewGoCollector(), collectors.NewProcessCollector(collectors.ProcessCollectorOpts{}),
	} {
		if err := m.registry.Register(c); err != nil {
			return nil, err
		}
	}
	for _, s := range o.Stations {
		m.addStation(s.Name)
	}
	m.zero(other)
	for _, q := range quantities() {
		for _, out := range verdict.Outcomes() {
			m.findings.WithLabelValues(string(q), string(out))
		}
	}
	for k := inspection.Broken; k <= inspection.Unavailable; k++ {
		m.rejected.WithLabelValues(reason(k))
	}
	return m, nil
}

// histogram has classic buckets, and native ones for servers that take them.
func histogram(name, help string, buckets []float64) prometheus.Histogram {
	return prometheus.NewHistogram(prometheus.HistogramOpts{
		Name: name, Help: help, Buckets: buckets,
		NativeHistogramBucketFactor: 1.1, NativeHistogramMaxBucketNumber: 100, NativeHistogramMinResetDuration: time.Hour,
	})
}

// quantities lists what a finding can be about.
func quantities() []parttype.Quantity {
	return []parttype.Quantity{
		parttype.FrequencyDeviation, parttype.MotionalResistance, parttype.ResonanceResistance, parttype.LoadResonanceResistance,
		parttype.MotionalCapacitance, parttype.ShuntCapacitance, parttype.QualityFactor, parttype.PullingSensitivity, parttype.PullingRange,
		parttype.StartMargin, parttype.DriveResistanceRatio, parttype.DriveMotionalResistance, parttype.DriveFrequencyShift,
		parttype.DriveReturnShift, parttype.OvertoneSuppression, parttype.UnwantedModeSuppression,
	}
}

// reason is the label of a kind.
func reason(k inspection.Kind) string {
	switch k {
	case inspection.Malformed, inspection.Unknown, inspection.Conflict, inspection.Forbidden, inspection.Busy, inspection.Unavailable:
		return k.String()
	}
	return "internal"
}

// Handler serves the metrics page.
func (m *Metrics) Handler() http.Handler {
	return promhttp.HandlerFor(m.registry, promhttp.HandlerOpts{MaxRequestsInFlight: 4, Timeout: 5 * time.Second, EnableOpenMetrics: false})
}

// Gatherer gives the numbers to whoever reads them without HTTP.
func (m *Metrics) Gatherer() prometheus.Gatherer { return m.registry }

// Judged notes how long the judgement took.
func (m *Metrics) Judged(_ *inspection.Record, fit time.Duration) { m.fit.Observe(fit.Seconds()) }

// Recorded counts a recorded inspection.
func (m *Metrics) Recorded(r *inspection.Record, lastSampleToRecorded time.Duration) {
	m.verdict.Observe(lastSampleToRecorded.Seconds())
	station := m.label(r.Begin.Station)
	m.seen(station, r.RecordedAt)
	if r.Begin.Purpose != inspection.Production {
		return
	}
	m.inspections.WithLabelValues(station, string(r.Judgement.Verdict)).Inc()
	for i := range r.Judgement.Findings {
		f := &r.Judgement.Findings[i]
		m.findings.WithLabelValues(string(f.Quantity), string(f.Outcome)).Inc()
	}
}

// Rejected counts what was refused.
func (m *Metrics) Rejected(_ inspection.StationID, kind inspection.Kind) {
	m.rejected.WithLabelValues(reason(kind)).Inc()
}

// Committed notes one commit of the store: how long it took, and how many inspections shared it. It is the hook of the store's writer.
func (m *Metrics) Committed(took time.Duration, inspections int) {
	m.commit.Observe(took.Seconds())
	m.batch.Observe(float64(inspections))
}

// Seed notes when the newest inspection of a station was recorded before the service started.
func (m *Metrics) Seed(station inspection.StationID, recordedAt time.Time) {
	m.seen(m.label(station), recordedAt)
}

// seen raises the time of the newest record of a label. Records may be told of out of order, and several stations share "other".
func (m *Metrics) seen(label string, at time.Time) {
	if at.IsZero() {
		return
	}
	seconds := float64(at.UnixMilli()) / 1e3
	m.mu.Lock()
	defer m.mu.Unlock()
	if seconds > m.newest[label] {
		m.newest[label] = seconds
		m.lastRecorded.WithLabelValues(label).Set(seconds)
	}
}

// label returns the label of a station.
func (m *Metrics) label(station inspection.StationID) string {
	m.mu.Lock()
	known := m.stations[station]
	room := !m.listed && len(m.stations) < MaxStations
	m.mu.Unlock()
	switch {
	case known:
		return string(station)
	case room && m.addStation(station):
		return string(station)
	}
	return other
}

// addStation gives a station a label of its own, with its series at 0; false: there is no room.
func (m *Metrics) addStation(station inspection.StationID) bool {
	m.mu.Lock()
	if !m.stations[station] && !m.listed && len(m.stations) >= MaxStations {
		m.mu.Unlock()
		return false
	}
	m.stations[station] = true
	m.mu.Unlock()
	m.zero(string(station))
	return true
}

func (m *Metrics) zero(label string) {
	for _, v := range verdict.Verdicts() {
		m.inspections.WithLabelValues(label, string(v))
	}
	m.lastRecorded.WithLabelValues(label)
}
