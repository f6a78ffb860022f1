package rpc

import (
	"strings"

	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/floor"
	"example.com/admit/service/inspection"
	"example.com/admit/service/wire"
)

// stationToProto converts one station's state.
func stationToProto(s *floor.State) *pb.Station {
	m := &pb.Station{
		Station: string(s.Name), Line: s.Line, FixtureNetwork: wire.NetworkToProto(s.Network),
		ContactHead: string(s.ContactHead), CalibrationId: string(s.Calibration), Connected: s.Connected,
	}
	for _, h := range s.ContactHeads {
		m.ContactHeads = append(m.ContactHeads, string(h))
	}
	if !s.LastSeen.IsZero() {
		m.LastSeenAt = timestamppb.New(s.LastSeen)
	}
	if s.Last != nil {
		m.LastInspection = summaryToProto(s.Last)
	}
	return m
}

func summaryToProto(r *inspection.Record) *pb.InspectionSummary {
	m := &pb.InspectionSummary{
		InspectionId: r.Begin.ID.String(), Sequence: r.Sequence, Unit: wire.UnitToProto(r.Begin.Unit),
		PartType: r.PartType.Name, PartTypeVersion: uint32(r.PartType.Version),
		Verdict: wire.Verdict(r.Judgement.Verdict), Grade: r.Judgement.Grade,
		MeasuredAt: timestamppb.New(r.Begin.MeasuredAt), RecordedAt: timestamppb.New(r.RecordedAt),
	}
	m.Reasons, m.Advice = r.Judgement.Reasons(), strings.Join(r.Judgement.Advice(), " ")
	return m
}
