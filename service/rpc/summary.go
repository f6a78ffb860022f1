package rpc

import (
	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
	"example.com/admit/service/wire"
)

// Advice to the operator after a fail; a retest brings the advice of its first cause.
const adviceAfterFail = "Set the unit aside as failed."

// Reasons returns what decided the verdict, in words, most important first, and what to do next: nothing after a pass, the broken limits
// after a fail, after a retest its causes and then the limits that stayed open.
func Reasons(j *verdict.Judgement) (reasons []string, advice string) {
	texts := func(o verdict.Outcome) {
		for i := range j.Findings {
			if f := &j.Findings[i]; f.Outcome == o {
				reasons = append(reasons, f.Text)
			}
		}
	}
	switch j.Verdict {
	case verdict.Fail:
		texts(verdict.Violates)
		return reasons, adviceAfterFail
	case verdict.Retest:
		for _, c := range j.RetestCauses {
			reasons = append(reasons, c.Text)
			if advice == "" {
				advice = c.Advice
			}
		}
		texts(verdict.Undecided)
		return reasons, advice
	}
	return nil, ""
}

// stationToProto converts one station's state.
func stationToProto(s *StationState) *pb.Station {
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
	m.Reasons, m.Advice = Reasons(&r.Judgement)
	return m
}
