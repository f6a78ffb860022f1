package metrics

import (
	"context"
	"time"

	"github.com/prometheus/client_golang/prometheus"

	"example.com/admit/service/inspection"
)

// Sources are asked each time the metrics are read; nil ones read as 0. They must answer at once, but for Status, which gets a second.
type Sources struct {
	Streams           func() int                                                // streams open
	Status            func(ctx context.Context) (inspection.StoreStatus, error) // of the store
	OldestRead        func() time.Duration                                      // age of the oldest read transaction, 0: none
	CertificateExpiry func() time.Time                                          // of the server's certificate, zero: none
	CertificateLoads  func() (attempts, failures uint64)                        // of certificate files
}

// Attach gives the sources once they exist; until then their numbers are 0.
func (m *Metrics) Attach(s Sources) { m.sources.Store(&s) }

// statusTimeout bounds how long a reader of the metrics waits for the store.
const statusTimeout = time.Second

// gauges are the numbers that are asked for when they are read.
type gauges struct{ m *Metrics }

var (
	streamsDesc = prometheus.NewDesc("admit_streams", "Streams that are open.", nil, nil)
	storageDesc = prometheus.NewDesc("admit_storage_bytes", "Size of the store's files.", nil, nil)
	freeDesc    = prometheus.NewDesc("admit_storage_free_bytes", "Room left on the store's file system.", nil, nil)
	oldestDesc  = prometheus.NewDesc("admit_oldest_read_seconds", "Age of the oldest read transaction of the store; 0: none is open.", nil, nil)
	canDesc     = prometheus.NewDesc("admit_storage_recording", "1 while inspections can be recorded, 0 while they cannot.", nil, nil)
	expiryDesc  = prometheus.NewDesc("admit_certificate_expiry_timestamp_seconds", "When the server's certificate ends, Unix time; 0: there is none.", nil, nil)
	loadsDesc   = prometheus.NewDesc("admit_certificate_loads_total", "Certificate files taken up or refused.", nil, nil)
	refusedDesc = prometheus.NewDesc("admit_certificate_load_failures_total", "Certificate files refused; the old ones stay in use.", nil, nil)
)

// Describe tells the registry what Collect gives.
func (g *gauges) Describe(ch chan<- *prometheus.Desc) {
	for _, d := range []*prometheus.Desc{streamsDesc, storageDesc, freeDesc, oldestDesc, canDesc, expiryDesc, loadsDesc, refusedDesc} {
		ch <- d
	}
}

// Collect asks the sources. A store that does not answer leaves its numbers out: a size of 0 would be believed.
func (g *gauges) Collect(ch chan<- prometheus.Metric) {
	s := g.m.sources.Load()
	gauge := func(d *prometheus.Desc, v float64) { ch <- prometheus.MustNewConstMetric(d, prometheus.GaugeValue, v) }
	counter := func(d *prometheus.Desc, v uint64) {
		ch <- prometheus.MustNewConstMetric(d, prometheus.CounterValue, float64(v))
	}
	streams, oldest, expiry := 0.0, 0.0, 0.0
	if s.Streams != nil {
		streams = float64(s.Streams())
	}
	if s.OldestRead != nil {
		oldest = s.OldestRead().Seconds()
	}
	if s.CertificateExpiry != nil {
		if at := s.CertificateExpiry(); !at.IsZero() {
			expiry = float64(at.Unix())
		}
	}
	var loads, refused uint64
	if s.CertificateLoads != nil {
		loads, refused = s.CertificateLoads()
	}
	gauge(streamsDesc, streams)
	gauge(oldestDesc, oldest)
	gauge(expiryDesc, expiry)
	counter(loadsDesc, loads)
	counter(refusedDesc, refused)
	g.store(s, gauge)
}

func (g *gauges) store(s *Sources, gauge func(*prometheus.Desc, float64)) {
	var st inspection.StoreStatus
	if s.Status != nil {
		ctx, cancel := context.WithTimeout(context.Background(), statusTimeout)
		defer cancel()
		var err error
		if st, err = s.Status(ctx); err != nil {
			gauge(canDesc, 0)
			return
		}
	}
	bytes := uint64(0)
	for _, v := range st.Volumes {
		bytes += v.RecordBytes + v.SampleBytes
	}
	can := 0.0
	if st.Recording {
		can = 1
	}
	gauge(canDesc, can)
	gauge(storageDesc, float64(bytes))
	gauge(freeDesc, float64(st.FreeBytes))
}
