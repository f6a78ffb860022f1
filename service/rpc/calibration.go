package rpc

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"

	"google.golang.org/grpc"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
	"example.com/admit/service/wire"
)

// calibrationIntake takes a calibration off the wire: first without samples, then the samples of its standards in their order.
type calibrationIntake struct {
	budget      *budget
	calibration *network.Calibration
	points      []uint32 // declared, of each standard
	last        int      // standard of the newest piece
	taken       int
}

func (t *calibrationIntake) start(m *pb.Calibration) (err error) {
	if n := len(m.GetStandards()); n > maxStandards {
		return malformed("calibration.standards", "want at most %d, got %d", maxStandards, n)
	}
	declared := 0
	for i, std := range m.GetStandards() {
		field := fmt.Sprintf("calibration.standards[%d].points", i)
		if p := std.GetPoints(); p < 1 || p > sweep.MaxPoints {
			return malformed(field, "want 1 to %d, got %d", sweep.MaxPoints, p)
		}
		if declared += int(std.GetPoints()); declared > inspection.MaxSample {
			return malformed(field, "want at most %d points in all standards, got %d", inspection.MaxSample, declared)
		}
		t.points = append(t.points, std.GetPoints())
	}
	if t.calibration, err = wire.CalibrationFromProto(m); err != nil {
		return within("calibration", err)
	}
	return nil
}

func (t *calibrationIntake) samples(m *pb.StandardSamples) error {
	if i := int64(m.GetStandardIndex()); i < int64(t.last) {
		return malformed("samples.standard_index", "want at least that of the piece before, %d, got %d", t.last, i)
	}
	n := len(m.GetSamples().GetFrequencyHz())
	if err := t.budget.take(n); err != nil {
		return err
	}
	t.taken += n
	if err := wire.AddStandardSamples(t.calibration, m); err != nil {
		return within("samples", err)
	}
	t.last = int(m.GetStandardIndex())
	if got := len(t.calibration.Standards[t.last].FrequencyHz); got > int(t.points[t.last]) {
		return malformed("samples", "want the %d points of standard %d, got at least %d", t.points[t.last], t.last, got)
	}
	return nil
}

// end checks that nothing is missing and that what arrived is a calibration.
func (t *calibrationIntake) end() error {
	c := t.calibration
	for i := range c.Standards {
		if got := len(c.Standards[i].FrequencyHz); got != int(t.points[i]) {
			return malformed("samples", "want the %d points of standard %d, got %d", t.points[i], i, got)
		}
	}
	if err := checkName("calibration.calibration_id", c.ID, true); err != nil {
		return err
	}
	if err := checkName("calibration.contact_head", c.ContactHead, true); err != nil {
		return err
	}
	if c.TakenAt.IsZero() {
		return malformed("calibration.taken_at", "want the time at which the standards were measured, got none")
	}
	if c.ValidFor <= 0 {
		return malformed("calibration.valid_for_s", "want above 0, got %g", c.ValidFor.Seconds())
	}
	if !(c.ReferenceImpedanceOhm > 0) {
		return malformed("calibration.reference_impedance_ohm", "want above 0, got %g", c.ReferenceImpedanceOhm)
	}
	if faults := c.Check(); len(faults) > 0 {
		return malformed("calibration."+faults[0].Field, "want %s, got %s", faults[0].Want, faults[0].Got)
	}
	return nil
}

func (t *calibrationIntake) release() {
	t.budget.give(t.taken)
	t.taken = 0
}

// PublishCalibration takes a calibration and has it kept.
func (h stationService) PublishCalibration(stream grpc.ClientStreamingServer[pb.PublishCalibrationRequest, pb.PublishCalibrationResponse]) error {
	s, ctx := h.s, stream.Context()
	in := receive(s, ctx, stream.Recv)
	t := calibrationIntake{budget: &s.budget}
	defer t.release()
	for {
		m, err := in.next(s.hurry)
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			return err
		}
		switch m := m.GetMessage().(type) {
		case *pb.PublishCalibrationRequest_Calibration:
			if t.calibration != nil {
				return malformed("calibration", "want it once, as the first message, got it again")
			}
			err = t.start(m.Calibration)
		case *pb.PublishCalibrationRequest_Samples:
			if t.calibration == nil {
				return malformed("calibration", "want it as the first message, got samples")
			}
			err = t.samples(m.Samples)
		default:
			err = malformed("message", "want calibration or samples, got neither")
		}
		if err != nil {
			return err
		}
	}
	if t.calibration == nil {
		return malformed("calibration", "want it as the first message, got nothing")
	}
	if err := t.end(); err != nil {
		return err
	}
	answer, err := s.publishCalibration(ctx, t.calibration)
	if err != nil {
		return err
	}
	return stream.SendAndClose(answer)
}

func (s *Server) publishCalibration(ctx context.Context, c *network.Calibration) (*pb.PublishCalibrationResponse, error) {
	caller := callerFrom(ctx)
	// An engineer may publish for every contact head, a fixture for those of its stations.
	if !caller.May(Engineer) && !s.board.Belongs(inspection.ContactHead(c.ContactHead), caller.SpeaksFor) {
		err := inspection.Faultf(inspection.Forbidden, "calibration.contact_head", "%q may not publish for contact head %q", caller.Name, c.ContactHead)
		s.security(ctx, "calibration_refused", caller.Name, pb.StationService_PublishCalibration_FullMethodName, err)
		return nil, err
	}
	already, err := s.o.Publisher.PublishCalibration(ctx, c, caller.Name)
	if err != nil {
		if inspection.KindOf(err) == inspection.Conflict {
			s.security(ctx, "calibration_refused", caller.Name, pb.StationService_PublishCalibration_FullMethodName, err)
		}
		return nil, err
	}
	s.log.LogAttrs(ctx, slog.LevelInfo, "calibration_published", slog.String("caller", caller.Name), slog.String("calibration", c.ID),
		slog.String("contact_head", c.ContactHead), slog.Bool("already", already))
	sum := inspection.CalibrationHash(c)
	return &pb.PublishCalibrationResponse{Sha256: sum[:], AlreadyPublished: already}, nil
}

// ReadCalibration sends a published calibration: without samples, then the samples of its standards.
func (h stationService) ReadCalibration(m *pb.ReadCalibrationRequest, stream grpc.ServerStreamingServer[pb.ReadCalibrationResponse]) error {
	s, ctx := h.s, stream.Context()
	if err := checkName("calibration_id", m.GetCalibrationId(), true); err != nil {
		return err
	}
	c, _, err := s.desk.Catalogue.Calibration(ctx, inspection.CalibrationID(m.GetCalibrationId()))
	if err != nil {
		return err
	}
	send := func(m *pb.ReadCalibrationResponse) error { return s.send(ctx, func() error { return stream.Send(m) }) }
	head := wire.CalibrationToProto(c, false)
	if err := send(&pb.ReadCalibrationResponse{Piece: &pb.ReadCalibrationResponse_Calibration{Calibration: head}}); err != nil {
		return err
	}
	for _, chunk := range wire.StandardSamplesToProto(c) {
		if err := send(&pb.ReadCalibrationResponse{Piece: &pb.ReadCalibrationResponse_Samples{Samples: chunk}}); err != nil {
			return err
		}
	}
	return nil
}
