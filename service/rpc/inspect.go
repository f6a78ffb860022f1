package rpc

import (
	"context"
	"errors"
	"io"
	"log/slog"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/wire"
)

// stationService is what stations say, and what is known of them.
type stationService struct {
	pb.UnimplementedStationServiceServer
	s *Server
}

// Inspect takes one inspection from Begin to End, and answers with a plan, a judgement, and the record.
func (h stationService) Inspect(stream grpc.BidiStreamingServer[pb.InspectRequest, pb.InspectResponse]) error {
	s := h.s
	i := inspect{s: s, ctx: stream.Context(), stream: stream, intake: intake{budget: &s.budget}}
	i.inbox = receive(s, i.ctx, stream.Recv)
	defer i.close()
	err := i.run()
	var f *inspection.Fault
	if errors.As(err, &f) {
		s.desk.Observer.Rejected(i.station, f.Kind)
		switch f.Kind {
		case inspection.Forbidden, inspection.Conflict:
			s.security(i.ctx, "inspection_refused", callerFrom(i.ctx).Name, pb.StationService_Inspect_FullMethodName, err)
		default:
			s.log.LogAttrs(i.ctx, slog.LevelInfo, "inspection_refused", slog.String("station", clip(string(i.station))),
				slog.String("inspection_id", i.id), slog.String("kind", f.Kind.String()), slog.String("why", shorten(err.Error(), maxErrorText)))
		}
	}
	return err
}

// inspect is one inspection under way.
type inspect struct {
	s       *Server
	ctx     context.Context
	stream  grpc.BidiStreamingServer[pb.InspectRequest, pb.InspectResponse]
	inbox   inbox[pb.InspectRequest]
	intake  intake
	session *inspection.Session
	station inspection.StationID
	id      string // of the inspection, once it is known
	closed  func() // tells the board
}

func (i *inspect) close() {
	i.intake.release()
	if i.closed != nil {
		i.closed()
	}
}

func (i *inspect) run() error {
	if err := i.begin(); err != nil {
		return err
	}
	if err := i.send(&pb.InspectResponse{Message: &pb.InspectResponse_Plan{Plan: wire.PlanToProto(i.session.Programme())}}); err != nil {
		return err
	}
	for {
		m, err := i.inbox.next(i.s.hurry)
		if errors.Is(err, io.EOF) {
			return malformed("end", "want End before the caller closes its side, got nothing")
		}
		if err != nil {
			return err
		}
		switch m := m.GetMessage().(type) {
		case *pb.InspectRequest_Header:
			err = i.header(m.Header)
		case *pb.InspectRequest_Samples:
			err = i.samples(m.Samples)
		case *pb.InspectRequest_End:
			return i.end(m.End)
		case *pb.InspectRequest_Begin:
			err = malformed("begin", "want it once, as the first message, got it again")
		default:
			err = malformed("message", "want header, samples or end, got none of them")
		}
		if err != nil {
			return err
		}
	}
}

// begin takes the first message: who, where, and whether the caller may.
func (i *inspect) begin() error {
	// A stream on which nothing began does not hold up a stop; one that began may end.
	m, err := i.inbox.next(i.s.told.Done())
	if errors.Is(err, io.EOF) {
		return malformed("begin", "want Begin as the first message, got nothing")
	}
	if err != nil {
		return err
	}
	b := m.GetBegin()
	if b == nil {
		return malformed("begin", "want Begin as the first message, got another")
	}
	i.station = inspection.StationID(b.GetStation())
	caller := callerFrom(i.ctx)
	if !caller.SpeaksFor(i.station) {
		return inspection.Faultf(inspection.Forbidden, "station", "%q may not speak for station %q", caller.Name, clip(b.GetStation()))
	}
	begin, err := wire.BeginFromProto(b)
	if err != nil {
		return within("begin", err)
	}
	i.id = begin.ID.String()
	if err := begin.Check(); err != nil {
		return within("begin", err)
	}
	if err := i.s.board.Admits(begin.Station, begin.ContactHead); err != nil {
		return within("begin", err)
	}
	if i.session, err = i.s.desk.Open(i.ctx, begin, caller.Name); err != nil {
		return within("begin", err)
	}
	i.closed = i.s.board.Opened(begin.Station)
	return nil
}

// header takes what is said of the next sweep; a source power that could overdrive a unit is refused before its samples.
func (i *inspect) header(m *pb.SweepHeader) error {
	h, err := i.intake.header(m)
	if err != nil {
		return err
	}
	return i.session.Announce(&h.Sweep)
}

func (i *inspect) samples(m *pb.SweepSamples) error {
	w, done, err := i.intake.samples(m)
	if err != nil || !done {
		return err
	}
	return i.session.Add(w)
}

// end judges what arrived, answers, has it recorded, and answers again. What the caller sends after End is not read.
func (i *inspect) end(m *pb.End) error {
	if err := i.intake.end(); err != nil {
		return err
	}
	var sent [32]byte
	if n := len(m.GetContentSha256()); n != 0 && n != len(sent) {
		return malformed("end.content_sha256", "want %d bytes or none, got %d", len(sent), n)
	}
	copy(sent[:], m.GetContentSha256())
	r, already, err := i.session.End(i.ctx, sent)
	if err != nil {
		return err
	}
	judged := &pb.InspectResponse{Message: &pb.InspectResponse_Judgement{Judgement: wire.JudgementToProto(&r.Judgement, r.Software)}}
	if err := i.send(judged); err != nil {
		return err
	}
	if !already {
		kept, err := i.session.Record(i.ctx, r)
		if err != nil {
			return err
		}
		r, already = kept.Record, kept.Already
	}
	return i.send(&pb.InspectResponse{Message: &pb.InspectResponse_Recorded{Recorded: &pb.Recorded{
		Sequence: r.Sequence, AlreadyRecorded: already, Judgement: wire.JudgementToProto(&r.Judgement, r.Software),
		Attempt: uint32(r.Attempt), RecordedAt: timestamppb.New(r.RecordedAt),
	}}})
}

func (i *inspect) send(m *pb.InspectResponse) error {
	return i.s.send(i.ctx, func() error { return i.stream.Send(m) })
}

// ListStations returns every station of a line and its latest state.
func (h stationService) ListStations(_ context.Context, m *pb.ListStationsRequest) (*pb.ListStationsResponse, error) {
	if err := checkName("line", m.GetLine(), false); err != nil {
		return nil, err
	}
	answer := &pb.ListStationsResponse{}
	for _, state := range h.s.board.Latest() {
		if m.GetLine() == "" || state.Line == m.GetLine() {
			answer.Stations = append(answer.Stations, stationToProto(&state))
		}
	}
	return answer, nil
}

// WatchStations sends the latest state of every station, then each change, and a sign of life in silence.
func (h stationService) WatchStations(m *pb.WatchStationsRequest, stream grpc.ServerStreamingServer[pb.WatchStationsResponse]) error {
	s, ctx := h.s, stream.Context()
	if err := checkName("station", m.GetStation(), false); err != nil {
		return err
	}
	tick := time.NewTicker(s.o.SignsOfLife)
	defer tick.Stop()
	version, quiet := uint64(0), false
	for {
		states, now, changed := s.board.Since(version)
		version = now
		sent := false
		for i := range states {
			if m.GetStation() != "" && string(states[i].Name) != m.GetStation() {
				continue
			}
			answer := &pb.WatchStationsResponse{Station: stationToProto(&states[i])}
			if err := s.send(ctx, func() error { return stream.Send(answer) }); err != nil {
				return err
			}
			sent = true
		}
		if sent {
			tick.Reset(s.o.SignsOfLife)
		} else if quiet {
			if err := s.send(ctx, func() error { return stream.Send(&pb.WatchStationsResponse{}) }); err != nil {
				return err
			}
		}
		quiet = false
		select {
		case <-changed:
		case <-tick.C:
			quiet = true
			if err := s.still(ctx, pb.StationService_WatchStations_FullMethodName); err != nil {
				return err
			}
		case <-s.told.Done():
			return errStopping
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

// still reports whether the caller of a long stream may go on: he may have been taken out of the list since it began.
func (s *Server) still(ctx context.Context, method string) error {
	c, err := s.caller(ctx)
	if err == nil && !allowed(c.grant, method) {
		err = forbidden("%q may not call %s any more", c.Name, method)
	}
	if err != nil {
		s.security(ctx, "stream_refused", callerFrom(ctx).Name, method, err)
	}
	return err
}
