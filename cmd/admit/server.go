package main

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"net/http"
	"os"
	"strings"
	"sync"
	"time"

	"example.com/admit/cmd/admit/config"
	"example.com/admit/service/inspection"
	"example.com/admit/service/metrics"
	"example.com/admit/service/rpc"
	"example.com/admit/service/web"
	"example.com/admit/storage"
)

// wallClock is the clock of the running program.
type wallClock struct{}

func (wallClock) Now() time.Time { return time.Now() }

// server is everything that `admit serve` runs, built in order and closed in the reverse one.
type server struct {
	log   *slog.Logger
	store *storage.Store
	rpc   *rpc.Server
	http  *http.Server

	stations, people net.Listener
	plain            bool
}

// build opens the store and both addresses. What was opened is closed again when a later part fails.
func build(c config.Config, log *slog.Logger) (s *server, err error) {
	s = &server{log: log, plain: c.TLS == config.TLS{}}
	defer func() {
		if err != nil {
			s.close()
		}
	}()
	clock := wallClock{}
	stations := stationsOf(c)
	numbers, err := metrics.New(metrics.Options{Stations: stations, Version: version, Revision: revision()})
	if err != nil {
		return s, err
	}
	// The addresses come first: a port in use must not leave a store behind.
	if s.stations, err = net.Listen("tcp", c.Listen); err != nil {
		return s, fmt.Errorf("address for stations: %w", err)
	}
	if s.people, err = net.Listen("tcp", c.HTTP); err != nil {
		return s, fmt.Errorf("address for people: %w", err)
	}
	certificates, err := certificatesOf(c, log)
	if err != nil {
		return s, badInput{err}
	}
	s.store, err = storage.Open(storage.Options{
		Folder: c.Store, Revision: revision(), Clock: clock, Logger: log,
		VolumeBytes: int64(c.Volume.MaximumMegabytes) << 20, VolumeAge: c.Volume.MaximumAge,
		Committed: numbers.Committed,
	})
	if err != nil {
		return s, err
	}
	desk := &inspection.Desk{
		Judge: inspection.NewJudge(), Recorder: s.store, Recollection: inspection.NewRecollection(s.store), Catalogue: s.store,
		Clock: clock, Observer: numbers, Software: revision(),
	}
	s.rpc, err = rpc.New(rpc.Options{Desk: desk, Archive: s.store, Publisher: s.store, Stations: stations, Access: accessOf(c), TLS: certificates, Log: log})
	if err != nil {
		return s, badInput{err}
	}
	sources := metrics.Sources{Streams: s.rpc.Streams, Status: s.store.Status, OldestRead: s.store.OldestRead}
	if certificates != nil {
		sources.CertificateExpiry, sources.CertificateLoads = certificates.Expiry, certificates.Loads
	}
	numbers.Attach(sources)
	for _, state := range s.rpc.Board().Latest() {
		if state.Last != nil {
			numbers.Seed(state.Name, state.Last.RecordedAt)
		}
	}
	if s.http, err = s.doors(numbers, clock); err != nil {
		return s, err
	}
	if !s.plain {
		s.http.TLSConfig = certificates.Config()
	}
	return s, nil
}

// certificatesOf opens the certificate files that a configuration names; nil where it names none.
func certificatesOf(c config.Config, log *slog.Logger) (*rpc.Certificates, error) {
	if c.TLS == (config.TLS{}) {
		return nil, nil
	}
	return rpc.OpenCertificates(rpc.CertificateFiles{Certificate: c.TLS.Certificate, Key: c.TLS.Key, CallerCAs: c.TLS.ClientAuthorities}, log, time.Now)
}

// doors puts pages, the JSON mapping and metrics behind one address.
func (s *server) doors(numbers *metrics.Metrics, clock inspection.Clock) (*http.Server, error) {
	json, err := s.rpc.Handler()
	if err != nil {
		return nil, err
	}
	pages, err := web.New(s.rpc.Board(), clock)
	if err != nil {
		return nil, err
	}
	mux := http.NewServeMux()
	mux.Handle("/v1/", json)
	mux.Handle("/metrics", s.rpc.Guard(numbers.Handler(), rpc.Metrics, rpc.Supervisor, rpc.Administrator))
	mux.Handle("/", s.rpc.Guard(pages, rpc.Operator, rpc.Supervisor, rpc.Engineer, rpc.Administrator))
	return &http.Server{
		Handler:           mux,
		ReadHeaderTimeout: 5 * time.Second,
		IdleTimeout:       2 * time.Minute,
		MaxHeaderBytes:    16 << 10,
		ErrorLog:          slog.NewLogLogger(s.log.Handler(), slog.LevelDebug),
	}, nil
}

// run serves until the context ends, then stops in order: the stations' side drains, then the people's, then the store closes.
func (s *server) run(ctx context.Context) error {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	var group sync.WaitGroup
	var mu sync.Mutex
	var failures []error
	actor := func(f func() error) {
		group.Go(func() {
			err := f()
			cancel() // when one ends, all are asked to
			if err != nil {
				mu.Lock()
				failures = append(failures, err)
				mu.Unlock()
			}
		})
	}
	actor(func() error { return s.rpc.Serve(ctx, rpc.Listener{Listener: s.stations, Plain: s.plain}) })
	actor(func() error {
		err := s.serveHTTP()
		if errors.Is(err, http.ErrServerClosed) {
			return nil
		}
		return err
	})
	actor(func() error {
		<-ctx.Done()
		patience, done := context.WithTimeout(context.Background(), 5*time.Second)
		defer done()
		if s.http.Shutdown(patience) != nil {
			return s.http.Close()
		}
		return nil
	})
	s.log.Info("serving", slog.String("stations", s.stations.Addr().String()), slog.String("http", s.people.Addr().String()), slog.String("revision", revision()))
	group.Wait()
	return errors.Join(append(failures, s.close())...)
}

func (s *server) serveHTTP() error {
	if s.plain {
		return s.http.Serve(s.people)
	}
	return s.http.ServeTLS(s.people, "", "")
}

// close releases what build opened.
func (s *server) close() error {
	var errs []error
	if s.rpc != nil {
		s.rpc.Close()
	}
	for _, l := range []net.Listener{s.stations, s.people} {
		if l != nil {
			if err := l.Close(); err != nil && !errors.Is(err, net.ErrClosed) {
				errs = append(errs, err)
			}
		}
	}
	if s.store != nil {
		errs = append(errs, s.store.Close())
	}
	return errors.Join(errs...)
}

// stationsOf turns the configured stations into the domain's.
func stationsOf(c config.Config) []inspection.Station {
	var out []inspection.Station
	for _, s := range c.Stations {
		station := inspection.Station{Name: inspection.StationID(s.Station), Line: s.Line, Network: s.FixtureNetwork}
		for _, h := range s.ContactHeads {
			station.ContactHeads = append(station.ContactHeads, inspection.ContactHead(h))
		}
		out = append(out, station)
	}
	return out
}

// accessOf turns the configured callers into grants.
func accessOf(c config.Config) rpc.Access {
	a := rpc.Access{Callers: map[string]rpc.Grant{}}
	for _, k := range c.Callers {
		g := rpc.Grant{}
		for _, p := range k.Permissions {
			g.Permissions = append(g.Permissions, rpc.Permission(p))
		}
		for _, s := range k.Stations {
			g.Stations = append(g.Stations, inspection.StationID(s))
		}
		a.Callers[k.Name] = g
	}
	if c.LoopbackPermissions != nil {
		g := rpc.Grant{EveryStation: true}
		for _, p := range c.LoopbackPermissions {
			g.Permissions = append(g.Permissions, rpc.Permission(p))
		}
		a.Loopback = &g
	}
	return a
}

// logger returns the logger that the configuration asks for, writing to standard error.
func logger(c config.Log) *slog.Logger {
	var level slog.Level
	_ = level.UnmarshalText([]byte(strings.ToUpper(c.Level))) // checked by the configuration
	o := &slog.HandlerOptions{Level: level}
	if c.Format == "json" {
		return slog.New(slog.NewJSONHandler(os.Stderr, o))
	}
	return slog.New(slog.NewTextHandler(os.Stderr, o))
}
