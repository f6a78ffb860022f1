package wire

import (
	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/verdict"
)

// OrderToProto converts what is known of the overtone order; nil stays nil.
func OrderToProto(o *verdict.Order) *pb.OvertoneOrder {
	if o == nil {
		return nil
	}
	m := &pb.OvertoneOrder{Order: uint32(o.Order), Probability: o.Probability, Text: o.Text}
	for _, c := range o.Candidates {
		m.Candidates = append(m.Candidates, &pb.OvertoneCandidate{Order: uint32(c.Order), Probability: c.Probability})
	}
	for i := range o.Responses {
		r := &o.Responses[i]
		m.Responses = append(m.Responses, &pb.OvertoneResponse{
			Order: uint32(r.Order), FrequencyHz: estimate(r.FrequencyHz), MultipleRatio: maybe(r.MultipleRatio),
			CapacitanceF: maybe(r.CapacitanceFarad), CapacitanceShare: maybe(r.CapacitanceShare),
		})
	}
	return m
}

func orderFromProto(m *pb.OvertoneOrder) *verdict.Order {
	if m == nil {
		return nil
	}
	o := &verdict.Order{Order: int(m.GetOrder()), Probability: m.GetProbability(), Text: m.GetText()}
	for _, c := range m.GetCandidates() {
		o.Candidates = append(o.Candidates, verdict.OrderCandidate{Order: int(c.GetOrder()), Probability: c.GetProbability()})
	}
	for _, r := range m.GetResponses() {
		o.Responses = append(o.Responses, verdict.OrderedResponse{
			Order: int(r.GetOrder()), FrequencyHz: value(r.GetFrequencyHz()), MultipleRatio: optional(r.GetMultipleRatio()),
			CapacitanceFarad: optional(r.GetCapacitanceF()), CapacitanceShare: optional(r.GetCapacitanceShare()),
		})
	}
	return o
}
