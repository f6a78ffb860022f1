package storage

import (
	"context"
	"log/slog"
	"sync"

	"example.com/admit/storage/catalogue"
)

// sealer closes volumes beside the recording goroutine: reading a whole volume takes seconds.
type sealer struct {
	catalogue *catalogue.Catalogue
	logger    *slog.Logger
	filtered  [][]byte
	ctx       context.Context
	cancel    context.CancelFunc
	group     sync.WaitGroup

	mu      sync.Mutex
	pending []job
	running bool
}

type job struct {
	volume *shelved
	done   chan error // holds one
}

func newSealer(c *catalogue.Catalogue, o WriterOptions) *sealer {
	ctx, cancel := context.WithCancel(context.Background())
	filtered := append([][]byte{o.IDTerm}, o.FilterTerms...)
	return &sealer{catalogue: c, logger: o.Logger, filtered: filtered, ctx: ctx, cancel: cancel}
}

// add puts a volume in line; the outcome will be in the job's channel.
func (s *sealer) add(v *shelved) job {
	s.mu.Lock()
	defer s.mu.Unlock()
	j := job{v, make(chan error, 1)}
	s.pending = append(s.pending, j)
	if !s.running {
		// One at a time; the goroutine ends when the line is empty. stop waits for it.
		s.running = true
		s.group.Go(s.run)
	}
	return j
}

func (s *sealer) run() {
	for {
		s.mu.Lock()
		if len(s.pending) == 0 {
			s.running = false
			s.mu.Unlock()
			return
		}
		next := s.pending[0]
		s.pending = s.pending[1:]
		s.mu.Unlock()
		err := s.seal(next.volume)
		switch {
		case err == nil:
			s.logger.Info("volume_closed", slog.Uint64("volume", next.volume.number))
		case s.ctx.Err() == nil:
			// It stays readable, and the next opening of the store tries again.
			s.logger.Error("volume_not_closed", slog.Uint64("volume", next.volume.number), slog.String("error", err.Error()))
		}
		next.done <- err
	}
}

func (s *sealer) seal(v *shelved) error {
	if err := v.volume.Retire(); err != nil {
		return err
	}
	if err := v.volume.Seal(s.ctx, s.filtered...); err != nil {
		return err
	}
	return s.catalogue.PutVolume(v.volume.Info())
}

// stop ends the current work as soon as possible and waits for it.
func (s *sealer) stop() {
	s.cancel()
	s.group.Wait()
}
