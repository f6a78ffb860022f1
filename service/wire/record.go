package wire

import (
	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
)

// RecordToProto converts a record; it is also the stored form.
func RecordToProto(r *inspection.Record) *pb.Inspection {
	m := &pb.Inspection{
		InspectionId:  r.Begin.ID.String(),
		Sequence:      r.Sequence,
		RecordedAt:    timestamp(r.RecordedAt),
		Begin:         BeginToProto(&r.Begin),
		PartType:      &pb.PartTypeReference{Name: r.PartType.Name, Version: uint32(r.PartType.Version), Sha256: bytesOf(r.PartType.Hash)},
		Judgement:     JudgementToProto(&r.Judgement, r.Software),
		Attempt:       uint32(r.Attempt),
		ContentSha256: bytesOf(r.ContentHash),
		Caller:        r.Caller,
		Background:    BackgroundToProto(&r.Background),
	}
	if r.Begin.Calibration != "" {
		m.Calibration = &pb.CalibrationReference{CalibrationId: string(r.Begin.Calibration), Sha256: bytesOf(r.CalibrationHash)}
	}
	for i, h := range r.Sweeps {
		m.Sweeps = append(m.Sweeps, HeaderToProto(i, h))
	}
	return m
}

// RecordFromProto converts a stored or received record back.
func RecordFromProto(m *pb.Inspection) (*inspection.Record, error) {
	r := &inspection.Record{Sequence: m.GetSequence(), RecordedAt: instant(m.GetRecordedAt()), Attempt: int(m.GetAttempt()), Caller: m.GetCaller()}
	var err error
	if r.Background, err = BackgroundFromProto(m.GetBackground()); err != nil {
		return nil, in("background", err)
	}
	if r.Begin, err = BeginFromProto(m.GetBegin()); err != nil {
		return nil, in("begin", err)
	}
	p := m.GetPartType()
	r.PartType.Name, r.PartType.Version = p.GetName(), int(p.GetVersion())
	if r.PartType.Hash, err = hash("part_type.sha256", p.GetSha256()); err != nil {
		return nil, err
	}
	if r.CalibrationHash, err = hash("calibration.sha256", m.GetCalibration().GetSha256()); err != nil {
		return nil, err
	}
	if r.ContentHash, err = hash("content_sha256", m.GetContentSha256()); err != nil {
		return nil, err
	}
	for _, s := range m.GetSweeps() {
		h, err := HeaderFromProto(s)
		if err != nil {
			return nil, in("sweeps", err)
		}
		r.Sweeps = append(r.Sweeps, h)
	}
	if r.Judgement, r.Software, err = JudgementFromProto(m.GetJudgement()); err != nil {
		return nil, in("judgement", err)
	}
	return r, nil
}
