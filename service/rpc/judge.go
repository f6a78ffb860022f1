package rpc

import (
	"errors"
	"io"

	"google.golang.org/grpc"
	"google.golang.org/protobuf/proto"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/wire"
)

// judgementService judges without remembering.
type judgementService struct {
	pb.UnimplementedJudgementServiceServer
	s *Server
}

// anonymous is the id of a case that was given none; it is recorded nowhere.
const anonymous = "00000000-0000-7000-8000-000000000000"

// judging is one case under way.
type judging struct {
	c        inspection.Case
	standard calibrationIntake
	sweeps   intake
}

// Judge takes one case whole and answers with its judgement.
func (h judgementService) Judge(stream grpc.ClientStreamingServer[pb.JudgeRequest, pb.JudgeResponse]) error {
	s, ctx := h.s, stream.Context()
	in := receive(s, ctx, stream.Recv)
	j := judging{standard: calibrationIntake{budget: &s.budget}, sweeps: intake{budget: &s.budget}}
	defer j.standard.release()
	defer j.sweeps.release()
	for {
		m, err := in.next(s.hurry)
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			return err
		}
		if err := j.take(m); err != nil {
			return err
		}
	}
	if j.c.PartType == nil {
		return malformed("context", "want it as the first message, got nothing")
	}
	if err := j.endOfStandards(); err != nil {
		return err
	}
	if err := j.sweeps.end(); err != nil {
		return err
	}
	judgement, err := s.desk.Judge.Judge(ctx, &j.c)
	if err != nil {
		return err
	}
	return stream.SendAndClose(&pb.JudgeResponse{Judgement: wire.JudgementToProto(&judgement, s.desk.Software)})
}

// take works off one message, in the order: context, samples of standards, sweeps.
func (j *judging) take(m *pb.JudgeRequest) error {
	if _, ok := m.GetMessage().(*pb.JudgeRequest_Context); !ok && j.c.PartType == nil {
		return malformed("context", "want it as the first message, got another")
	}
	switch m := m.GetMessage().(type) {
	case *pb.JudgeRequest_Context:
		if j.c.PartType != nil {
			return malformed("context", "want it once, as the first message, got it again")
		}
		return within("context", j.context(m.Context))
	case *pb.JudgeRequest_StandardSamples:
		if j.c.Calibration == nil || j.sweeps.headers > 0 {
			return malformed("standard_samples", "want them after a calibration and before the first sweep")
		}
		return within("standard_samples", j.standard.samples(m.StandardSamples))
	case *pb.JudgeRequest_Header:
		if j.sweeps.headers == 0 {
			if err := j.endOfStandards(); err != nil {
				return err
			}
		}
		_, err := j.sweeps.header(m.Header)
		return err
	case *pb.JudgeRequest_Samples:
		w, done, err := j.sweeps.samples(m.Samples)
		if err != nil || !done {
			return err
		}
		if faults := w.Check(); len(faults) > 0 {
			return inspection.Faultf(inspection.Malformed, "samples", "sweep %d: %w", len(j.c.Sweeps), faults[0])
		}
		j.c.Sweeps = append(j.c.Sweeps, w)
		return nil
	}
	return malformed("message", "want context, standard_samples, header or samples, got none of them")
}

// context takes everything but samples.
func (j *judging) context(m *pb.JudgeContext) error {
	if m.GetBegin().GetInspectionId() == "" && m.GetBegin() != nil {
		m = proto.CloneOf(m)
		m.Begin.InspectionId = anonymous
	}
	b, err := wire.BeginFromProto(m.GetBegin())
	if err == nil {
		err = b.Check()
	}
	if err != nil {
		return within("begin", err)
	}
	p, err := parseLimits("limits_file", m.GetLimitsFile())
	if err != nil {
		return err
	}
	if b.PartType.Name != p.Name || (b.PartType.Version != 0 && b.PartType.Version != p.Version) {
		return malformed("begin.part_type", "want that of the limits file, %s version %d, got %s version %d", p.Name, p.Version, b.PartType.Name, b.PartType.Version)
	}
	if string(b.Calibration) != m.GetCalibration().GetCalibrationId() {
		return malformed("begin.calibration_id", "want that of the calibration, %q, got %q", clip(m.GetCalibration().GetCalibrationId()), b.Calibration)
	}
	if m.GetCalibration() != nil {
		if err := j.standard.start(m.GetCalibration()); err != nil {
			return err
		}
		j.c.Calibration = j.standard.calibration
	}
	if j.c.Background, err = wire.BackgroundFromProto(m.GetBackground()); err != nil {
		return within("background", err)
	}
	j.c.Begin, j.c.PartType = b, p
	return nil
}

// endOfStandards checks the calibration once its samples must be there.
func (j *judging) endOfStandards() error {
	if j.c.Calibration == nil {
		return nil
	}
	return j.standard.end()
}
