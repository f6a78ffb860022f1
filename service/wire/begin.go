package wire

import (
	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
)

var purposes = table[inspection.Purpose, pb.Purpose]{"purpose", []pair[inspection.Purpose, pb.Purpose]{
	{inspection.Production, pb.Purpose_PURPOSE_PRODUCTION},
	{inspection.Reference, pb.Purpose_PURPOSE_REFERENCE},
	{inspection.Check, pb.Purpose_PURPOSE_CHECK},
	{inspection.FirstArticle, pb.Purpose_PURPOSE_FIRST_ARTICLE},
	{inspection.Study, pb.Purpose_PURPOSE_STUDY},
	{inspection.Engineering, pb.Purpose_PURPOSE_ENGINEERING},
}}

// Purpose converts a purpose from the wire; unspecified is production.
func Purpose(p pb.Purpose) (inspection.Purpose, error) {
	if p == pb.Purpose_PURPOSE_UNSPECIFIED {
		return inspection.Production, nil
	}
	return purposes.toDomain(p)
}

// UnitToProto converts a unit's identity.
func UnitToProto(u inspection.UnitID) *pb.Unit {
	return &pb.Unit{Serial: string(u.Serial), Lot: string(u.Lot), Carrier: u.Carrier, Pocket: uint32(u.Pocket), Attempt: uint32(u.Attempt)}
}

func unitFromProto(m *pb.Unit) (u inspection.UnitID, err error) {
	u = inspection.UnitID{Serial: inspection.Serial(m.GetSerial()), Lot: inspection.Lot(m.GetLot()), Carrier: m.GetCarrier()}
	if u.Pocket, err = integer("unit.pocket", m.GetPocket(), 1000000); err != nil {
		return u, err
	}
	u.Attempt, err = integer("unit.attempt", m.GetAttempt(), 1000)
	return u, err
}

// BeginToProto converts what is said of an inspection before its first sample.
func BeginToProto(b *inspection.Begin) *pb.Begin {
	m := &pb.Begin{
		InspectionId:    b.ID.String(),
		Purpose:         purposes.toWire(b.Purpose),
		Unit:            UnitToProto(b.Unit),
		Station:         string(b.Station),
		ContactHead:     string(b.ContactHead),
		Operator:        b.Operator,
		PartType:        b.PartType.Name,
		PartTypeVersion: uint32(b.PartType.Version),
		CalibrationId:   string(b.Calibration),
		MeasuredAt:      timestamp(b.MeasuredAt),
		ReferenceLocked: b.ReferenceLock,
		AnswerWithinS:   b.AnswerWithin.Seconds(),
	}
	if t := b.Temperature; t != nil {
		m.Temperature = &pb.Temperature{ValueC: t.Celsius, StandardUncertaintyC: t.StandardUncertainty}
	}
	if b.Offline != nil {
		m.OfflineJudgement = JudgementToProto(b.Offline, "")
	}
	return m
}

// BeginFromProto converts it back. The result still has to be checked (Begin.Check).
func BeginFromProto(m *pb.Begin) (b inspection.Begin, err error) {
	if b.ID, err = inspection.ParseID(m.GetInspectionId()); err != nil {
		return b, err
	}
	if b.Purpose, err = Purpose(m.GetPurpose()); err != nil {
		return b, err
	}
	if b.Unit, err = unitFromProto(m.GetUnit()); err != nil {
		return b, err
	}
	b.Station = inspection.StationID(m.GetStation())
	b.ContactHead = inspection.ContactHead(m.GetContactHead())
	b.Operator = m.GetOperator()
	b.PartType.Name = m.GetPartType()
	if b.PartType.Version, err = integer("part_type_version", m.GetPartTypeVersion(), 1<<30); err != nil {
		return b, err
	}
	b.Calibration = inspection.CalibrationID(m.GetCalibrationId())
	if m.GetMeasuredAt() != nil && m.GetMeasuredAt().CheckValid() != nil {
		return b, inspection.Faultf(inspection.Malformed, "measured_at", "want a valid timestamp, got %v", m.GetMeasuredAt())
	}
	b.MeasuredAt = instant(m.GetMeasuredAt())
	b.ReferenceLock = m.ReferenceLocked
	if b.AnswerWithin, err = duration("answer_within_s", m.GetAnswerWithinS()); err != nil {
		return b, err
	}
	if t := m.GetTemperature(); t != nil {
		b.Temperature = &inspection.Temperature{Celsius: t.GetValueC(), StandardUncertainty: t.GetStandardUncertaintyC()}
	}
	if j := m.GetOfflineJudgement(); j != nil {
		offline, _, err := JudgementFromProto(j)
		if err != nil {
			return b, in("offline_judgement", err)
		}
		b.Offline = &offline
	}
	return b, nil
}
