package rpc

import (
	"context"
	"log/slog"
	"runtime/debug"
	"strings"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"
	"google.golang.org/protobuf/proto"

	"example.com/admit/service/inspection"
)

type callerContext struct{}

// callerFrom returns who made the call that a handler works on.
func callerFrom(ctx context.Context) Caller {
	c, _ := ctx.Value(callerContext{}).(Caller)
	return c
}

// admit finds out who is calling and whether he may; every call of every service passes here.
func (s *Server) admit(ctx context.Context, method string) (context.Context, error) {
	c, err := s.caller(ctx)
	if err == nil && !allowed(c.grant, method) {
		err = forbidden("%q may not call %s", c.Name, method)
	}
	if err != nil {
		s.security(ctx, "call_refused", c.Name, method, err)
		s.desk.Observer.Rejected("", inspection.Forbidden)
		return nil, err
	}
	return context.WithValue(ctx, callerContext{}, c), nil
}

// unary is the way of every call that is no stream.
func (s *Server) unary(ctx context.Context, request any, info *grpc.UnaryServerInfo, handler grpc.UnaryHandler) (response any, err error) {
	defer func() { err = s.answer(ctx, info.FullMethod, err) }()
	if ctx, err = s.admit(ctx, info.FullMethod); err != nil {
		return nil, err
	}
	if err := checkSize(request); err != nil {
		return nil, err
	}
	if _, ok := ctx.Deadline(); !ok {
		var cancel context.CancelFunc
		ctx, cancel = context.WithTimeout(ctx, callTimeout)
		defer cancel()
	}
	// Work that cannot end in time is not begun.
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	return handler(ctx, request)
}

// stream is the way of every stream.
func (s *Server) stream(srv any, stream grpc.ServerStream, info *grpc.StreamServerInfo, handler grpc.StreamHandler) (err error) {
	ctx := stream.Context()
	defer func() { err = s.answer(ctx, info.FullMethod, err) }()
	if ctx, err = s.admit(ctx, info.FullMethod); err != nil {
		return err
	}
	defer s.streams.Add(-1)
	if n := s.streams.Add(1); n > int64(s.o.MaxStreams) {
		return inspection.Faultf(inspection.Busy, "streams", "at most %d streams at once, this is one more", s.o.MaxStreams)
	}
	if err := ctx.Err(); err != nil {
		return err
	}
	if !strings.HasPrefix(info.FullMethod, "/admit.v1.") {
		// Streams of the health and reflection services know nothing of a stop; their context ends with the service.
		var cancel context.CancelFunc
		ctx, cancel = context.WithCancel(ctx)
		defer cancel()
		defer context.AfterFunc(s.foreign, cancel)()
	}
	return handler(srv, &checkedStream{stream, ctx})
}

// checkedStream holds every message against the contract's size.
type checkedStream struct {
	grpc.ServerStream
	ctx context.Context
}

func (c *checkedStream) Context() context.Context { return c.ctx }

func (c *checkedStream) RecvMsg(m any) error {
	if err := c.ServerStream.RecvMsg(m); err != nil {
		return err
	}
	return checkSize(m)
}

// checkSize refuses a message above the contract's size. The transport refuses much larger ones by itself.
func checkSize(m any) error {
	if p, ok := m.(proto.Message); ok {
		if n := proto.Size(p); n > MaxMessage {
			return malformed("message", "want at most %d bytes in one message, got %d", MaxMessage, n)
		}
	}
	return nil
}

// recovered logs a panic of a handler with its stack; the caller is told nothing of it.
func (s *Server) recovered(ctx context.Context, p any) error {
	method, _ := grpc.Method(ctx)
	s.log.LogAttrs(ctx, slog.LevelError, "call_panicked", slog.String("method", method), slog.Any("panic", p), slog.String("stack", string(debug.Stack())))
	return status.Error(codes.Internal, "internal fault; the log of the service says more")
}

// inbox gives the messages of a stream one after the other. They are read by a goroutine, at most one ahead, so that the wait for the next
// can end with the caller's deadline and with the service; the goroutine ends with the stream.
type inbox[M any] struct {
	ctx      context.Context
	arrivals chan arrival[M]
}

type arrival[M any] struct {
	m   *M
	err error
}

func receive[M any](s *Server, ctx context.Context, recv func() (*M, error)) inbox[M] {
	in := inbox[M]{ctx, make(chan arrival[M])}
	s.pumps.Go(func() {
		for {
			m, err := recv()
			select {
			case in.arrivals <- arrival[M]{m, err}:
			case <-ctx.Done():
				return
			}
			if err != nil {
				return
			}
		}
	})
	return in
}

// next returns the next message, io.EOF after the last, and an error once end is closed or the caller is gone.
func (in inbox[M]) next(end <-chan struct{}) (*M, error) {
	select {
	case a := <-in.arrivals:
		return a.m, a.err
	case <-in.ctx.Done():
		return nil, in.ctx.Err()
	case <-end:
		return nil, errStopping
	}
}

// errStopping ends what cannot be waited for.
var errStopping = inspection.Faultf(inspection.Unavailable, "", "the service is stopping; send it again")

// send sends one message with patience for a slow reader, and no more than that: flow control would let it block the handler for as long
// as the reader likes. When send fails the handler must end, which also ends the message under way.
func (s *Server) send(ctx context.Context, send func() error) error {
	done := make(chan error, 1)
	s.pumps.Go(func() { done <- send() })
	patience := time.NewTimer(s.o.Patience)
	defer patience.Stop()
	select {
	case err := <-done:
		return err
	case <-patience.C:
		return inspection.Faultf(inspection.Busy, "", "no message was taken for %v", s.o.Patience)
	case <-s.hurry:
		return errStopping
	case <-ctx.Done():
		return ctx.Err()
	}
}
