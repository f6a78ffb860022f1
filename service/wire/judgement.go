package wire

import (
	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/parttype"
	"example.com/admit/service/verdict"
)

// JudgementToProto converts a judgement; software is the revision that judged.
func JudgementToProto(j *verdict.Judgement, software string) *pb.Judgement {
	m := &pb.Judgement{
		Verdict: verdicts.toWire(j.Verdict), Grade: j.Grade, ScaleUnknown: j.ScaleUnknown, Remarks: j.Remarks, SoftwareRevision: software,
		Disposition: string(j.Disposition), ShuntCapacitanceAwayF: maybe(j.ShuntCapacitanceFarad), OvertoneOrder: OrderToProto(j.Order),
	}
	for i := range j.Findings {
		m.Findings = append(m.Findings, findingToProto(&j.Findings[i]))
	}
	for _, c := range j.RetestCauses {
		m.RetestCauses = append(m.RetestCauses, &pb.RetestCause{Cause: string(c.Cause), Text: c.Text, Advice: c.Advice, CausedByStation: c.Station})
	}
	if j.Main != nil {
		m.Main = mainToProto(j.Main, j.ScaleUnknown)
	}
	if l := j.Load; l != nil {
		m.Load = &pb.LoadParameters{
			LoadResonanceHz:            estimate(l.LoadResonanceHz),
			LoadResonanceResistanceOhm: estimate(l.LoadResonanceResistanceOhm),
			PullingSensitivityPpmPerPf: estimate(l.PullingSensitivityPPMPerPF),
			LoadCapacitanceF:           l.LoadCapacitanceFarad,
			Connection:                 l.Connection,
		}
	}
	for _, d := range j.Drive {
		m.Drive = append(m.Drive, &pb.DriveReading{
			Step: uint32(d.Step), PowerW: estimate(d.PowerWatt),
			MotionalResistanceOhm: estimate(d.MotionalResistanceOhm), MotionalResonanceHz: estimate(d.MotionalResonanceHz),
		})
	}
	for _, r := range j.Modes {
		mode := &pb.ModeReading{
			Kind: r.Kind, FrequencyHz: estimate(r.FrequencyHz), ResistanceOhm: estimate(r.ResistanceOhm), SuppressionDb: estimate(r.SuppressionDB),
			MultipleRatio: maybe(r.MultipleRatio),
		}
		if r.Order > 0 {
			mode.Order = ptr(uint32(r.Order))
		}
		m.Modes = append(m.Modes, mode)
	}
	for _, o := range j.Observability {
		m.Observability = append(m.Observability, &pb.Observability{FromHz: o.FromHz, ToHz: o.ToHz, NarrowestWidthHz: o.NarrowestWidthHz, SuppressionDb: o.SuppressionDB})
	}
	if q := j.Quality; q != nil {
		m.Quality = &pb.SweepQuality{SnrDb: q.SNRDecibel, ReducedChiSquare: q.ReducedChiSquare, ResidualCorrelation: q.ResidualCorrelation}
		if q.SettlingTimeConstants > 0 {
			m.Quality.SettlingTimeConstants = ptr(q.SettlingTimeConstants)
		}
	}
	for _, b := range j.Budget {
		m.Budget = append(m.Budget, &pb.BudgetLine{
			Source: b.Source, MotionalResonanceHz: b.MotionalResonanceHz, MotionalResistanceOhm: b.MotionalResistanceOhm,
			MotionalInductanceH: b.MotionalInductanceHenry, ShuntCapacitanceF: b.ShuntCapacitanceFarad,
		})
	}
	return m
}

// mainToProto converts the main quantities; with an unknown scale only frequencies and Q are given.
func mainToProto(v *verdict.Main, scaleUnknown bool) *pb.MotionalParameters {
	m := &pb.MotionalParameters{
		MotionalResonanceHz: estimate(v.MotionalResonanceHz),
		QualityFactor:       estimate(v.QualityFactor),
	}
	if scaleUnknown {
		return m
	}
	m.ParallelResonanceHz = estimate(v.ParallelResonanceHz)
	m.MotionalResistanceOhm = estimate(v.MotionalResistanceOhm)
	m.MotionalInductanceH = estimate(v.MotionalInductanceHenry)
	m.MotionalCapacitanceF = estimate(v.MotionalCapacitanceFarad)
	m.ShuntCapacitanceF = estimate(v.ShuntCapacitanceFarad)
	m.FigureOfMerit = estimate(v.FigureOfMerit)
	m.ResonanceHz = maybe(v.ResonanceHz)
	m.ResonanceResistanceOhm = maybe(v.ResonanceResistanceOhm)
	m.AntiresonanceHz = maybe(v.AntiresonanceHz)
	return m
}

func findingToProto(f *verdict.Finding) *pb.Finding {
	m := &pb.Finding{
		Quantity: string(f.Quantity), Unit: f.Unit, Lower: f.Bounds.Min, Upper: f.Bounds.Max, Outcome: string(f.Outcome), Text: f.Text,
	}
	if f.HasValue {
		m.Value = ptr(f.Measured.Value)
		m.StandardUncertainty = ptr(f.Measured.StandardUncertainty)
		m.CommonUncertainty, m.Readings = ptr(f.CommonUncertainty), uint32(f.Readings)
		if f.Outcome != verdict.Suspended {
			m.ConformanceProbability = ptr(f.ConformanceProbability)
		}
	}
	m.Where = whereToProto(f.Where)
	return m
}

// whereToProto converts a place; one that does not apply is absent.
func whereToProto(w verdict.Where) *pb.Where {
	if w == verdict.Nowhere {
		return nil
	}
	m := &pb.Where{}
	if w.DriveStep >= 0 {
		m.DriveStep = ptr(uint32(w.DriveStep))
	}
	if w.Order > 0 {
		m.Order = ptr(uint32(w.Order))
	}
	if w.FrequencyRatio > 0 {
		m.FrequencyRatio = ptr(w.FrequencyRatio)
	}
	if w.FromHz != 0 || w.ToHz != 0 {
		m.FromHz, m.ToHz = ptr(w.FromHz), ptr(w.ToHz)
	}
	return m
}

func whereFromProto(m *pb.Where) verdict.Where {
	w := verdict.Nowhere
	if m == nil {
		return w
	}
	if m.DriveStep != nil {
		w.DriveStep = int(m.GetDriveStep())
	}
	w.Order, w.FrequencyRatio = int(m.GetOrder()), m.GetFrequencyRatio()
	w.FromHz, w.ToHz = m.GetFromHz(), m.GetToHz()
	return w
}

// JudgementFromProto converts a judgement back, with the revision that judged. A number that is none, or infinite, is refused: it would
// be stored with the inspection that it came with.
func JudgementFromProto(m *pb.Judgement) (j verdict.Judgement, software string, err error) {
	if err := finite(m.ProtoReflect()); err != nil {
		return j, "", err
	}
	if j.Verdict, err = verdicts.toDomain(m.GetVerdict()); err != nil {
		return j, "", err
	}
	j.Grade, j.ScaleUnknown, j.Remarks = m.GetGrade(), m.GetScaleUnknown(), m.GetRemarks()
	j.Disposition, j.ShuntCapacitanceFarad = verdict.Disposition(m.GetDisposition()), optional(m.GetShuntCapacitanceAwayF())
	j.Order = orderFromProto(m.GetOvertoneOrder())
	for _, f := range m.GetFindings() {
		j.Findings = append(j.Findings, findingFromProto(f))
	}
	for _, c := range m.GetRetestCauses() {
		j.RetestCauses = append(j.RetestCauses, verdict.RetestCause{Cause: verdict.Cause(c.GetCause()), Text: c.GetText(), Advice: c.GetAdvice(), Station: c.GetCausedByStation()})
	}
	if v := m.GetMain(); v != nil {
		j.Main = &verdict.Main{
			MotionalResonanceHz:      value(v.GetMotionalResonanceHz()),
			MotionalResistanceOhm:    value(v.GetMotionalResistanceOhm()),
			MotionalInductanceHenry:  value(v.GetMotionalInductanceH()),
			MotionalCapacitanceFarad: value(v.GetMotionalCapacitanceF()),
			ShuntCapacitanceFarad:    value(v.GetShuntCapacitanceF()),
			QualityFactor:            value(v.GetQualityFactor()),
			FigureOfMerit:            value(v.GetFigureOfMerit()),
			ParallelResonanceHz:      value(v.GetParallelResonanceHz()),
			ResonanceHz:              optional(v.GetResonanceHz()),
			ResonanceResistanceOhm:   optional(v.GetResonanceResistanceOhm()),
			AntiresonanceHz:          optional(v.GetAntiresonanceHz()),
		}
	}
	if l := m.GetLoad(); l != nil {
		j.Load = &verdict.Load{
			LoadCapacitanceFarad: l.GetLoadCapacitanceF(), Connection: l.GetConnection(),
			LoadResonanceHz:            value(l.GetLoadResonanceHz()),
			LoadResonanceResistanceOhm: value(l.GetLoadResonanceResistanceOhm()),
			PullingSensitivityPPMPerPF: value(l.GetPullingSensitivityPpmPerPf()),
		}
	}
	for _, d := range m.GetDrive() {
		j.Drive = append(j.Drive, verdict.DriveReading{
			Step: int(d.GetStep()), PowerWatt: value(d.GetPowerW()),
			MotionalResistanceOhm: value(d.GetMotionalResistanceOhm()), MotionalResonanceHz: value(d.GetMotionalResonanceHz()),
		})
	}
	for _, r := range m.GetModes() {
		j.Modes = append(j.Modes, verdict.ModeReading{
			Kind: r.GetKind(), Order: int(r.GetOrder()),
			FrequencyHz: value(r.GetFrequencyHz()), ResistanceOhm: value(r.GetResistanceOhm()), SuppressionDB: value(r.GetSuppressionDb()),
			MultipleRatio: optional(r.GetMultipleRatio()),
		})
	}
	for _, o := range m.GetObservability() {
		j.Observability = append(j.Observability, verdict.Observability{FromHz: o.GetFromHz(), ToHz: o.GetToHz(), NarrowestWidthHz: o.GetNarrowestWidthHz(), SuppressionDB: o.GetSuppressionDb()})
	}
	if q := m.GetQuality(); q != nil {
		j.Quality = &verdict.Quality{
			SNRDecibel: q.GetSnrDb(), ReducedChiSquare: q.GetReducedChiSquare(), ResidualCorrelation: q.GetResidualCorrelation(),
			SettlingTimeConstants: q.GetSettlingTimeConstants(),
		}
	}
	for _, b := range m.GetBudget() {
		j.Budget = append(j.Budget, verdict.BudgetLine{
			Source: b.GetSource(), MotionalResonanceHz: b.GetMotionalResonanceHz(), MotionalResistanceOhm: b.GetMotionalResistanceOhm(),
			MotionalInductanceHenry: b.GetMotionalInductanceH(), ShuntCapacitanceFarad: b.GetShuntCapacitanceF(),
		})
	}
	return j, m.GetSoftwareRevision(), nil
}

func findingFromProto(m *pb.Finding) verdict.Finding {
	f := verdict.Finding{
		Quantity: parttype.Quantity(m.GetQuantity()), Where: whereFromProto(m.GetWhere()), Unit: m.GetUnit(),
		Bounds:                 parttype.Bounds{Min: m.Lower, Max: m.Upper},
		HasValue:               m.Value != nil,
		Measured:               verdict.Value{Value: m.GetValue(), StandardUncertainty: m.GetStandardUncertainty()},
		CommonUncertainty:      m.GetCommonUncertainty(),
		Readings:               int(m.GetReadings()),
		ConformanceProbability: m.GetConformanceProbability(),
		Outcome:                verdict.Outcome(m.GetOutcome()), Text: m.GetText(),
	}
	return f
}

func estimate(v verdict.Value) *pb.Estimate {
	return &pb.Estimate{Value: v.Value, StandardUncertainty: v.StandardUncertainty}
}

func maybe(v *verdict.Value) *pb.Estimate {
	if v == nil {
		return nil
	}
	return estimate(*v)
}

func value(m *pb.Estimate) verdict.Value {
	return verdict.Value{Value: m.GetValue(), StandardUncertainty: m.GetStandardUncertainty()}
}

func optional(m *pb.Estimate) *verdict.Value {
	if m == nil {
		return nil
	}
	v := value(m)
	return &v
}
