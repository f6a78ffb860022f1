package rpc

import (
	"context"

	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
)

// storeService shows the store to those who keep it.
type storeService struct {
	pb.UnimplementedStoreServiceServer
	s *Server
}

// GetStoreStatus returns what the store holds and how it fares.
func (h storeService) GetStoreStatus(ctx context.Context, _ *pb.GetStoreStatusRequest) (*pb.GetStoreStatusResponse, error) {
	st, err := h.s.o.Archive.Status(ctx)
	if err != nil {
		return nil, err
	}
	answer := &pb.GetStoreStatusResponse{
		Recording: st.Recording, Fault: st.Fault, LastSequence: st.Last, Inspections: st.Inspections, FreeBytes: st.FreeBytes, Schema: st.Schema,
	}
	for _, v := range st.Volumes {
		m := &pb.VolumeStatus{
			Number: v.Number, Open: v.Open, FirstSequence: v.FirstSequence, LastSequence: v.LastSequence,
			Inspections: v.Inspections, RecordBytes: v.RecordBytes, SampleBytes: v.SampleBytes,
		}
		if !v.MeasuredFrom.IsZero() {
			m.MeasuredFrom = timestamppb.New(v.MeasuredFrom)
		}
		if !v.MeasuredUntil.IsZero() {
			m.MeasuredUntil = timestamppb.New(v.MeasuredUntil)
		}
		answer.Volumes = append(answer.Volumes, m)
	}
	return answer, nil
}
