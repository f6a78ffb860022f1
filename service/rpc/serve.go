package rpc

import (
	"context"
	"errors"
	"log/slog"
	"net"
	"sync"
	"time"

	healthpb "google.golang.org/grpc/health/grpc_health_v1"

	pb "example.com/admit/api/admit/v1"
)

// Serve accepts calls on the listeners until ctx ends or a listener fails, then stops in order: health to not serving, no new
// connections, watchers told to go elsewhere, what is under way let finish for the grace period, the rest cut off with Unavailable. It
// returns when no handler runs any more; the error is that of a listener, nil after a stop. It closes the listeners, and is called once.
func (s *Server) Serve(ctx context.Context, listeners ...Listener) error {
	if s.served.Swap(true) {
		return errors.New("rpc: the server was served or closed before")
	}
	for _, l := range listeners {
		if err := l.check(s.o.TLS != nil); err != nil {
			s.drain()
			return err
		}
	}
	var serving sync.WaitGroup
	failed := make(chan error, len(listeners)+1)
	accept := func(l net.Listener) {
		serving.Go(func() {
			if err := s.grpc.Serve(l); err != nil {
				failed <- err
			}
		})
	}
	accept(s.inward)
	for _, l := range listeners {
		if l.Plain {
			accept(plainListener{l.Listener})
		} else {
			accept(l.Listener)
		}
	}
	watching, stopWatching := context.WithCancel(ctx)
	s.setHealth(healthpb.HealthCheckResponse_SERVING)
	serving.Go(func() { s.watchRecording(watching) })
	var err error
	select {
	case <-ctx.Done():
	case err = <-failed:
		s.log.Error("listener_failed", slog.Any("error", err))
	}
	stopWatching()
	s.drain()
	serving.Wait()
	return err
}

// Hurry cuts the grace period short, as a second signal does.
func (s *Server) Hurry() { s.hurryOnce.Do(func() { close(s.hurry) }) }

// Close stops a server that is not served. It is harmless afterwards.
func (s *Server) Close() {
	if !s.served.Swap(true) {
		s.drain()
	}
}

// drain ends everything, in order.
func (s *Server) drain() {
	s.stopOnce.Do(func() {
		s.log.Info("stopping", slog.Int("streams", s.Streams()), slog.Float64("grace_s", s.o.Grace.Seconds()))
		s.health.Shutdown()
		s.tell()
		// Watchers of the health service read "not serving" before their stream ends.
		foreign := time.AfterFunc(s.o.Grace/10, s.endForeign)
		ended := make(chan struct{})
		go func() {
			defer close(ended)
			s.grpc.GracefulStop()
		}()
		grace := time.NewTimer(s.o.Grace)
		defer grace.Stop()
		select {
		case <-ended:
		case <-grace.C:
		case <-s.hurry:
		}
		s.Hurry()
		s.endForeign()
		foreign.Stop()
		// Handlers that were told answer at once; a caller who reads nothing does not hold up the stop.
		last := time.NewTimer(s.o.Grace / 10)
		defer last.Stop()
		select {
		case <-ended:
		case <-last.C:
			s.log.Warn("stopped_by_force", slog.Int("streams", s.Streams()))
			s.grpc.Stop()
		}
		<-ended
		s.client.Close()
		s.inward.Close()
		s.pumps.Wait()
		s.log.Info("stopped")
	})
}

// watchRecording keeps the health of the services that record in step with the store: on a full disk the service still shows what it has,
// but a station must not send.
func (s *Server) watchRecording(ctx context.Context) {
	tick := time.NewTicker(s.o.StoreCheck)
	defer tick.Stop()
	recording := true
	for {
		status, err := s.o.Archive.Status(ctx)
		if ctx.Err() != nil {
			return
		}
		if now := err == nil && status.Recording; now != recording {
			recording = now
			state := healthpb.HealthCheckResponse_SERVING
			if !recording {
				state = healthpb.HealthCheckResponse_NOT_SERVING
			}
			s.health.SetServingStatus(pb.StationService_ServiceDesc.ServiceName, state)
			s.log.Warn("recording_changed", slog.Bool("recording", recording), slog.String("fault", status.Fault))
		}
		select {
		case <-tick.C:
		case <-ctx.Done():
			return
		}
	}
}
