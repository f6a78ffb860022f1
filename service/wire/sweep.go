package wire

import (
	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
)

var roles = table[sweep.Role, pb.SweepRole]{"role", []pair[sweep.Role, pb.SweepRole]{
	{sweep.Main, pb.SweepRole_SWEEP_ROLE_MAIN},
	{sweep.Drive, pb.SweepRole_SWEEP_ROLE_DRIVE},
	{sweep.Overtone, pb.SweepRole_SWEEP_ROLE_OVERTONE},
	{sweep.Unwanted, pb.SweepRole_SWEEP_ROLE_UNWANTED},
	{sweep.ShuntCapacitance, pb.SweepRole_SWEEP_ROLE_SHUNT_CAPACITANCE},
}}

var quantities = table[sweep.Quantity, pb.SampleQuantity]{"quantity", []pair[sweep.Quantity, pb.SampleQuantity]{
	{sweep.S21, pb.SampleQuantity_SAMPLE_QUANTITY_S21},
	{sweep.S11, pb.SampleQuantity_SAMPLE_QUANTITY_S11},
	{sweep.S21Magnitude, pb.SampleQuantity_SAMPLE_QUANTITY_S21_MAGNITUDE},
	{sweep.Admittance, pb.SampleQuantity_SAMPLE_QUANTITY_ADMITTANCE},
	{sweep.Impedance, pb.SampleQuantity_SAMPLE_QUANTITY_IMPEDANCE},
}}

var phases = table[sweep.SourcePhase, pb.SourcePhase]{"source_phase", []pair[sweep.SourcePhase, pb.SourcePhase]{
	{sweep.PhaseUnstated, pb.SourcePhase_SOURCE_PHASE_UNSPECIFIED},
	{sweep.PhaseContinuous, pb.SourcePhase_SOURCE_PHASE_CONTINUOUS},
	{sweep.PhaseRestarted, pb.SourcePhase_SOURCE_PHASE_RESTARTED},
}}

// HeaderToProto converts a sweep without its samples; index is its place in the inspection.
func HeaderToProto(index int, h inspection.SweepHeader) *pb.SweepHeader {
	m := &pb.SweepHeader{
		Index:          uint32(index),
		Role:           roles.toWire(h.Role),
		Quantity:       quantities.toWire(h.Quantity),
		SourcePowerDbm: h.SourcePowerDBm,
		SourcePhase:    phases.toWire(h.Timing.Phase),
		Points:         uint32(h.Points),
	}
	if h.Order > 0 {
		m.Order = ptr(uint32(h.Order))
	}
	if h.FrequencyRatio > 0 {
		m.FrequencyRatio = ptr(h.FrequencyRatio)
	}
	if h.Role == sweep.Drive {
		m.DriveStep = ptr(uint32(h.DriveStep))
	}
	if h.Timing.Dwell > 0 {
		m.DwellS = ptr(h.Timing.Dwell.Seconds())
	}
	if h.Timing.Averaging > 0 {
		m.AveragingS = ptr(h.Timing.Averaging.Seconds())
	}
	if h.Timing.LeadIn > 0 {
		m.LeadInS = ptr(h.Timing.LeadIn.Seconds())
	}
	if g := h.Grid; g != nil {
		m.Grid = &pb.Grid{StartHz: g.StartHz, StopHz: g.StopHz, Points: uint32(g.Points)}
	}
	return m
}

// maxRatio is the largest ratio of an overtone window to the fundamental: above any order.
const maxRatio = 1000.0

// HeaderFromProto converts a sweep header; the samples follow on their own.
func HeaderFromProto(m *pb.SweepHeader) (h inspection.SweepHeader, err error) {
	if h.Role, err = roles.toDomain(m.GetRole()); err != nil {
		return h, err
	}
	if h.Quantity, err = quantities.toDomain(m.GetQuantity()); err != nil {
		return h, err
	}
	if h.Timing.Phase, err = phases.toDomain(m.GetSourcePhase()); err != nil {
		return h, err
	}
	if h.Points, err = integer("points", m.GetPoints(), sweep.MaxPoints); err != nil {
		return h, err
	}
	if h.Points == 0 {
		return h, inspection.Faultf(inspection.Malformed, "points", "want 1 to %d, got 0", sweep.MaxPoints)
	}
	if h.Order, err = integer("order", m.GetOrder(), 1000); err != nil {
		return h, err
	}
	if h.DriveStep, err = integer("drive_step", m.GetDriveStep(), 1000); err != nil {
		return h, err
	}
	if h.Role == sweep.Drive && m.DriveStep == nil {
		return h, inspection.Faultf(inspection.Malformed, "drive_step", "want the index of the level, got none")
	}
	// The domain writes "no ratio" as 0, so nothing but a ratio may be stated: a negative one would change on its way back.
	if r := m.FrequencyRatio; r != nil && !(*r > 0 && *r <= maxRatio) {
		return h, inspection.Faultf(inspection.Malformed, "frequency_ratio", "want above 0 and at most %g, got %g", maxRatio, *r)
	}
	h.FrequencyRatio = m.GetFrequencyRatio()
	h.SourcePowerDBm = m.SourcePowerDbm
	if h.Timing.Dwell, err = duration("dwell_s", m.GetDwellS()); err != nil {
		return h, err
	}
	if h.Timing.Averaging, err = duration("averaging_s", m.GetAveragingS()); err != nil {
		return h, err
	}
	if h.Timing.LeadIn, err = duration("lead_in_s", m.GetLeadInS()); err != nil {
		return h, err
	}
	if g := m.GetGrid(); g != nil {
		if g.GetPoints() != m.GetPoints() {
			return h, inspection.Faultf(inspection.Malformed, "grid.points", "want the header's %d points, got %d", m.GetPoints(), g.GetPoints())
		}
		h.Grid = &sweep.Grid{StartHz: g.GetStartHz(), StopHz: g.GetStopHz(), Points: int(g.GetPoints())}
	}
	return h, nil
}

// Assembly joins the chunks of one sweep. Its zero value waits for a header.
type Assembly struct {
	w      sweep.Sweep
	points int
	open   bool
}

// Start begins a sweep.
func (a *Assembly) Start(h inspection.SweepHeader) {
	a.w, a.points, a.open = h.Sweep, h.Points, true
	// The declared number of points is held against its limit by HeaderFromProto; room is made as samples arrive, so that a header
	// alone costs nothing.
	a.w.FrequencyHz, a.w.Re, a.w.Im = nil, nil, nil
}

// Open reports whether a sweep was started and is not complete.
func (a *Assembly) Open() bool { return a.open }

// Add takes the next chunk. When the sweep is complete it is returned with done true.
func (a *Assembly) Add(m *pb.SweepSamples) (w sweep.Sweep, done bool, err error) {
	if !a.open {
		return w, false, inspection.Faultf(inspection.Malformed, "samples", "want the header of a sweep first, got samples")
	}
	n := len(m.GetRe())
	frequencies, imaginary := n, n
	if a.w.Grid != nil {
		frequencies = 0
	}
	if !a.w.Quantity.Complex() {
		imaginary = 0
	}
	if len(m.GetFrequencyHz()) != frequencies || len(m.GetIm()) != imaginary || n == 0 {
		return w, false, inspection.Faultf(inspection.Malformed, "samples", "want at least one sample, with %d frequencies and %d imaginary parts beside %d real parts; got %d and %d",
			frequencies, imaginary, n, len(m.GetFrequencyHz()), len(m.GetIm()))
	}
	if len(a.w.Re)+n > a.points {
		return w, false, inspection.Faultf(inspection.Malformed, "samples", "want the %d points of the header, got at least %d", a.points, len(a.w.Re)+n)
	}
	a.w.Re = append(a.w.Re, m.GetRe()...)
	a.w.Im = append(a.w.Im, m.GetIm()...)
	a.w.FrequencyHz = append(a.w.FrequencyHz, m.GetFrequencyHz()...)
	if len(a.w.Re) < a.points {
		return w, false, nil
	}
	if g := a.w.Grid; g != nil {
		a.w.FrequencyHz = make([]float64, a.points)
		for i := range a.w.FrequencyHz {
			a.w.FrequencyHz[i] = g.At(i)
		}
	}
	a.open = false
	return a.w, true, nil
}

// ChunkPoints is how many points SamplesToProto puts into one message: well below 256 KiB with frequencies.
const ChunkPoints = 4096

// SamplesToProto cuts a sweep's samples into chunks, which share the sweep's memory.
func SamplesToProto(w *sweep.Sweep) []*pb.SweepSamples {
	var chunks []*pb.SweepSamples
	for from := 0; from < w.Points(); from += ChunkPoints {
		to := min(from+ChunkPoints, w.Points())
		m := &pb.SweepSamples{Re: w.Re[from:to]}
		if w.Quantity.Complex() {
			m.Im = w.Im[from:to]
		}
		if w.Grid == nil {
			m.FrequencyHz = w.FrequencyHz[from:to]
		}
		chunks = append(chunks, m)
	}
	return chunks
}

func ptr[T any](v T) *T { return &v }
