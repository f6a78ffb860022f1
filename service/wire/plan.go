package wire

import (
	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/plan"
	"example.com/admit/service/sweep"
)

// PlanToProto converts the sweeps that a part type asks for.
func PlanToProto(sweeps []plan.Sweep) *pb.SweepPlan {
	m := &pb.SweepPlan{}
	for _, s := range sweeps {
		p := &pb.PlannedSweep{
			Role:           roles.toWire(s.Role),
			Grid:           &pb.Grid{StartHz: s.Grid.StartHz, StopHz: s.Grid.StopHz, Points: uint32(s.Grid.Points)},
			SourcePowerDbm: ptr(s.SourcePowerDBm),
			DwellS:         ptr(s.Dwell.Seconds()),
			WaitS:          s.Wait.Seconds(),
		}
		if s.Order > 0 {
			p.Order = ptr(uint32(s.Order))
		}
		if s.FrequencyRatio > 0 {
			p.FrequencyRatio = ptr(s.FrequencyRatio)
		}
		if s.Role == sweep.Drive {
			p.DriveStep = ptr(uint32(s.DriveStep))
		}
		m.Sweeps = append(m.Sweeps, p)
	}
	return m
}
