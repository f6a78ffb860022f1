package wire

import (
	"math"
	"time"

	"pgregory.net/rapid"

	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// The generators below give every value that the domain may hold: what the domain writes as "none" (an empty text, 0, nil) as well as
// the ends of each range.

func number(t *rapid.T, label string) float64 {
	return rapid.OneOf(
		rapid.Float64Range(-1e15, 1e15), rapid.SampledFrom([]float64{0, math.Copysign(0, -1), 5e-324, -math.MaxFloat64, math.MaxFloat64, 1 + 2.220446049250313e-16}),
	).Draw(t, label)
}

func positive(t *rapid.T, label string) float64 {
	return rapid.Float64Range(1e-30, 1e12).Draw(t, label)
}

func numbers(t *rapid.T, n int, label string) []float64 {
	if n == 0 {
		return nil
	}
	return rapid.SliceOfN(rapid.Custom(func(t *rapid.T) float64 { return number(t, label) }), n, n).Draw(t, label)
}

func maybeNumber(t *rapid.T, label string) *float64 {
	if !rapid.Bool().Draw(t, label+" there") {
		return nil
	}
	v := number(t, label)
	return &v
}

func name(t *rapid.T, label string) string {
	return rapid.StringN(0, 20, inspection.MaxText).Draw(t, label)
}

// span draws a length of time of whole nanoseconds: exact in seconds of a float64 up to 104 days, beyond that in whole seconds.
func span(t *rapid.T, label string) time.Duration {
	if rapid.Bool().Draw(t, label+" long") {
		return time.Duration(rapid.Int64Range(0, maxSeconds).Draw(t, label)) * time.Second
	}
	return time.Duration(rapid.Int64Range(0, 1<<52).Draw(t, label))
}

func when(t *rapid.T, label string) time.Time {
	if rapid.IntRange(0, 9).Draw(t, label+" none") == 0 {
		return time.Time{}
	}
	return time.Unix(rapid.Int64Range(0, 7e9).Draw(t, label), rapid.Int64Range(0, 999999999).Draw(t, label+" ns")).UTC()
}

func hash32(t *rapid.T, label string) (h [32]byte) {
	copy(h[:], rapid.SliceOfN(rapid.Byte(), 32, 32).Draw(t, label))
	return h
}

func oneOf[T any](t *rapid.T, label string, all ...T) T {
	return rapid.SampledFrom(all).Draw(t, label)
}

func drawID(t *rapid.T) (id inspection.ID) {
	copy(id[:], rapid.SliceOfN(rapid.Byte(), 16, 16).Draw(t, "id"))
	id[6], id[8] = id[6]&0x0f|0x70, id[8]&0x3f|0x80
	return id
}

func drawBegin(t *rapid.T) inspection.Begin {
	b := inspection.Begin{
		ID: drawID(t), Purpose: oneOf(t, "purpose", inspection.Purposes()...),
		Unit: inspection.UnitID{
			Serial: inspection.Serial(name(t, "serial")), Lot: inspection.Lot(name(t, "lot")), Carrier: name(t, "carrier"),
			Pocket: rapid.IntRange(0, 1000000).Draw(t, "pocket"), Attempt: rapid.IntRange(0, 1000).Draw(t, "attempt"),
		},
		Station: inspection.StationID(name(t, "station")), ContactHead: inspection.ContactHead(name(t, "head")), Operator: name(t, "operator"),
		PartType:    inspection.PartTypeRef{Name: name(t, "part type"), Version: rapid.IntRange(0, 1<<30).Draw(t, "version")},
		Calibration: inspection.CalibrationID(name(t, "calibration")), MeasuredAt: when(t, "measured at"), AnswerWithin: span(t, "answer within"),
	}
	if rapid.Bool().Draw(t, "temperature there") {
		b.Temperature = &inspection.Temperature{Celsius: number(t, "temperature"), StandardUncertainty: number(t, "its uncertainty")}
	}
	if rapid.Bool().Draw(t, "lock there") {
		locked := rapid.Bool().Draw(t, "lock")
		b.ReferenceLock = &locked
	}
	if rapid.Bool().Draw(t, "offline there") {
		j := drawJudgement(t)
		b.Offline = &j
	}
	return b
}

func drawHeader(t *rapid.T, points int) inspection.SweepHeader {
	h := inspection.SweepHeader{Points: points}
	h.Role, h.Quantity = oneOf(t, "role", sweep.Roles()...), oneOf(t, "quantity", sweep.Quantities()...)
	switch h.Role {
	case sweep.Drive:
		h.DriveStep = rapid.IntRange(0, 1000).Draw(t, "step")
	case sweep.Overtone:
		if rapid.Bool().Draw(t, "by order") {
			h.Order = rapid.IntRange(1, 1000).Draw(t, "order")
		} else {
			h.FrequencyRatio = rapid.Float64Range(1e-3, maxRatio).Draw(t, "ratio")
		}
	}
	h.SourcePowerDBm = maybeNumber(t, "power")
	h.Timing = sweep.Timing{
		Dwell: span(t, "dwell"), Averaging: span(t, "averaging"), LeadIn: span(t, "lead-in"),
		Phase: oneOf(t, "phase", append(sweep.SourcePhases(), sweep.PhaseUnstated)...),
	}
	if rapid.Bool().Draw(t, "grid there") {
		h.Grid = &sweep.Grid{StartHz: positive(t, "start"), StopHz: positive(t, "stop"), Points: points}
	}
	return h
}

func drawSweep(t *rapid.T) sweep.Sweep {
	n := rapid.IntRange(1, 40).Draw(t, "points")
	if rapid.IntRange(0, 19).Draw(t, "large") == 0 {
		n = rapid.IntRange(ChunkPoints-1, 2*ChunkPoints+1).Draw(t, "many points")
	}
	w := drawHeader(t, n).Sweep
	// Long arrays repeat what was drawn: it is their cutting that is tried, not each of their values.
	few := min(n, 40)
	w.Re = repeat(numbers(t, few, "re"), n)
	if w.Quantity.Complex() {
		w.Im = repeat(numbers(t, few, "im"), n)
	}
	for i := range n {
		if w.Grid != nil {
			w.FrequencyHz = append(w.FrequencyHz, w.Grid.At(i))
		} else {
			w.FrequencyHz = append(w.FrequencyHz, w.Re[(i*7)%few])
		}
	}
	return w
}

func repeat(v []float64, n int) []float64 {
	all := make([]float64, n)
	for i := range all {
		all[i] = v[i%len(v)]
	}
	return all
}

func drawValue(t *rapid.T, label string) verdict.Value {
	return verdict.Value{Value: number(t, label), StandardUncertainty: number(t, label+" uncertainty")}
}

func maybeValue(t *rapid.T, label string) *verdict.Value {
	if !rapid.Bool().Draw(t, label+" there") {
		return nil
	}
	v := drawValue(t, label)
	return &v
}

func drawWhere(t *rapid.T) verdict.Where {
	w := verdict.Nowhere
	switch rapid.IntRange(0, 4).Draw(t, "where") {
	case 1:
		w.DriveStep = rapid.IntRange(0, 1000).Draw(t, "step")
	case 2:
		w.Order = rapid.IntRange(1, 1000).Draw(t, "order")
	case 3:
		w.FrequencyRatio = positive(t, "ratio")
	case 4:
		w.FromHz, w.ToHz = number(t, "from"), positive(t, "to")
	}
	return w
}

func drawFinding(t *rapid.T) verdict.Finding {
	f := verdict.Finding{
		Quantity: parttype.Quantity(name(t, "quantity")), Where: verdict.Nowhere, Unit: name(t, "unit"), Text: name(t, "text"),
		Bounds:  parttype.Bounds{Min: maybeNumber(t, "lower"), Max: maybeNumber(t, "upper")},
		Outcome: oneOf(t, "outcome", verdict.Outcomes()...), HasValue: rapid.Bool().Draw(t, "value there"),
	}
	if f.HasValue {
		f.Measured = drawValue(t, "value")
		f.CommonUncertainty, f.Readings = number(t, "common"), rapid.IntRange(0, 99).Draw(t, "readings")
		if f.Outcome != verdict.Suspended {
			f.ConformanceProbability = rapid.Float64Range(0, 1).Draw(t, "probability")
		}
	}
	f.Where = drawWhere(t)
	return f
}

func several[T any](t *rapid.T, label string, draw func(*rapid.T) T) []T {
	n := rapid.IntRange(0, 3).Draw(t, label)
	var all []T
	for range n {
		all = append(all, draw(t))
	}
	return all
}

func drawJudgement(t *rapid.T) verdict.Judgement {
	j := verdict.Judgement{
		Verdict: oneOf(t, "verdict", verdict.Verdicts()...), Grade: name(t, "grade"), Findings: several(t, "findings", drawFinding),
		RetestCauses: several(t, "causes", func(t *rapid.T) verdict.RetestCause {
			return verdict.RetestCause{Cause: oneOf(t, "cause", verdict.Causes()...), Text: name(t, "text"), Advice: name(t, "advice"), Station: rapid.Bool().Draw(t, "station")}
		}),
		ScaleUnknown: rapid.Bool().Draw(t, "scale unknown"),
		Drive: several(t, "drive", func(t *rapid.T) verdict.DriveReading {
			return verdict.DriveReading{Step: rapid.IntRange(0, 99).Draw(t, "step"), PowerWatt: drawValue(t, "power"), MotionalResistanceOhm: drawValue(t, "R1"), MotionalResonanceHz: drawValue(t, "fs")}
		}),
		Modes: several(t, "modes", func(t *rapid.T) verdict.ModeReading {
			return verdict.ModeReading{Kind: oneOf(t, "kind", "overtone", "unwanted"), Order: rapid.IntRange(0, 99).Draw(t, "order"), FrequencyHz: drawValue(t, "f"), ResistanceOhm: drawValue(t, "R"), SuppressionDB: drawValue(t, "s"), MultipleRatio: maybeValue(t, "multiple")}
		}),
		Observability: several(t, "observability", func(t *rapid.T) verdict.Observability {
			return verdict.Observability{FromHz: number(t, "from"), ToHz: number(t, "to"), NarrowestWidthHz: number(t, "width"), SuppressionDB: number(t, "suppression")}
		}),
		Budget: several(t, "budget", func(t *rapid.T) verdict.BudgetLine {
			return verdict.BudgetLine{Source: name(t, "source"), MotionalResonanceHz: number(t, "fs"), MotionalResistanceOhm: number(t, "R1"), MotionalInductanceHenry: number(t, "L1"), ShuntCapacitanceFarad: number(t, "C0")}
		}),
		Remarks: several(t, "remarks", func(t *rapid.T) string { return name(t, "remark") }),

		Disposition:           oneOf(t, "disposition", verdict.NoDisposition, verdict.Passed, verdict.Failed, verdict.SetAside),
		ShuntCapacitanceFarad: maybeValue(t, "C0 away"),
	}
	if rapid.Bool().Draw(t, "order there") {
		j.Order = &verdict.Order{
			Order: rapid.IntRange(0, 99).Draw(t, "order"), Probability: number(t, "probability"), Text: name(t, "text"),
			Candidates: several(t, "candidates", func(t *rapid.T) verdict.OrderCandidate {
				return verdict.OrderCandidate{Order: rapid.IntRange(0, 99).Draw(t, "candidate"), Probability: number(t, "its probability")}
			}),
			Responses: several(t, "responses", func(t *rapid.T) verdict.OrderedResponse {
				return verdict.OrderedResponse{
					Order: rapid.IntRange(0, 99).Draw(t, "response"), FrequencyHz: drawValue(t, "f"), MultipleRatio: maybeValue(t, "multiple"),
					CapacitanceFarad: maybeValue(t, "Cn"), CapacitanceShare: maybeValue(t, "share"),
				}
			}),
		}
	}
	if rapid.Bool().Draw(t, "main there") {
		m := verdict.Main{MotionalResonanceHz: drawValue(t, "fs"), QualityFactor: drawValue(t, "Q")}
		if !j.ScaleUnknown {
			m.MotionalResistanceOhm, m.MotionalInductanceHenry, m.MotionalCapacitanceFarad = drawValue(t, "R1"), drawValue(t, "L1"), drawValue(t, "C1")
			m.ShuntCapacitanceFarad, m.FigureOfMerit, m.ParallelResonanceHz = drawValue(t, "C0"), drawValue(t, "M"), drawValue(t, "fp")
			m.ResonanceHz, m.ResonanceResistanceOhm, m.AntiresonanceHz = maybeValue(t, "fr"), maybeValue(t, "Rr"), maybeValue(t, "fa")
		}
		j.Main = &m
	}
	if rapid.Bool().Draw(t, "load there") {
		j.Load = &verdict.Load{
			LoadCapacitanceFarad: number(t, "CL"), Connection: oneOf(t, "connection", "series", "parallel"),
			LoadResonanceHz: drawValue(t, "fL"), LoadResonanceResistanceOhm: drawValue(t, "RL"), PullingSensitivityPPMPerPF: drawValue(t, "S"),
		}
	}
	if rapid.Bool().Draw(t, "quality there") {
		j.Quality = &verdict.Quality{SNRDecibel: number(t, "snr"), ReducedChiSquare: number(t, "chi"), ResidualCorrelation: number(t, "correlation")}
		if rapid.Bool().Draw(t, "settling there") {
			j.Quality.SettlingTimeConstants = positive(t, "settling")
		}
	}
	return j
}

func drawCalibration(t *rapid.T) *network.Calibration {
	c := &network.Calibration{
		ID: name(t, "id"), ContactHead: name(t, "head"), Network: oneOf(t, "network", network.Kinds()...),
		ReferenceImpedanceOhm: number(t, "Z0"), NominalTerminationOhm: number(t, "RT"), TakenAt: when(t, "taken at"), ValidFor: span(t, "valid for"),
		TemperatureC: maybeNumber(t, "temperature"), SourceLevelOffsetDB: number(t, "level"), SourceLevelUncertaintyDB: number(t, "level uncertainty"),
		DriftGainDB: number(t, "gain"), DriftPhaseDeg: number(t, "phase"), ContactUncertaintyOhm: number(t, "contact"),
		ReferenceClockOffsetPPM: number(t, "clock"), ReferenceClockUncertaintyPPM: number(t, "clock uncertainty"),
		Standards: several(t, "standards", func(t *rapid.T) network.Standard {
			n := rapid.IntRange(1, 20).Draw(t, "points")
			s := network.Standard{
				Kind: oneOf(t, "kind", network.StandardKinds()...), ResistanceOhm: number(t, "R"), ResistanceUncertaintyOhm: number(t, "u(R)"),
				InductanceHenry: number(t, "L"), InductanceUncertaintyHenry: number(t, "u(L)"), CapacitanceFarad: number(t, "C"), CapacitanceUncertaintyFarad: number(t, "u(C)"),
				FrequencyHz: numbers(t, n, "f"), Re: numbers(t, n, "re"),
			}
			if rapid.Bool().Draw(t, "complex") {
				s.Im = numbers(t, n, "im")
			}
			return s
		}),
	}
	if rapid.Bool().Draw(t, "noise there") {
		c.ReceiverNoise = &network.ReceiverNoise{RMS: number(t, "rms"), SourcePowerDBm: maybeNumber(t, "noise power"), Averaging: span(t, "averaging")}
	}
	return c
}

func drawBackground(t *rapid.T) inspection.Background {
	b := inspection.Background{
		AttemptsUsed: rapid.IntRange(0, 99).Draw(t, "used"), HighAtLowDrive: rapid.IntRange(0, 99).Draw(t, "high"),
		Readings: several(t, "earlier", func(t *rapid.T) verdict.Past {
			return verdict.Past{
				Quantity: parttype.Quantity(name(t, "quantity")), Where: drawWhere(t), Mean: drawValue(t, "mean"),
				CommonUncertainty: number(t, "common"), Readings: rapid.IntRange(0, 99).Draw(t, "readings"),
			}
		}),
	}
	if rapid.Bool().Draw(t, "lot there") {
		b.Lot = &inspection.LotMedian{
			Units: rapid.IntRange(0, 99).Draw(t, "units"), ResistanceOhm: number(t, "R1"), CapacitanceFarad: number(t, "C1"), ShuntCapacitanceFarad: number(t, "C0"),
		}
	}
	if rapid.Bool().Draw(t, "previous there") {
		b.Previous = &inspection.PreviousUnit{
			Unit:        drawBegin(t).Unit,
			ResonanceHz: drawValue(t, "fs"), ResistanceOhm: drawValue(t, "R1"), CapacitanceFarad: drawValue(t, "C1"), ShuntCapacitanceFarad: drawValue(t, "C0"),
		}
	}
	return b
}

func drawRecord(t *rapid.T) *inspection.Record {
	r := &inspection.Record{
		Begin: drawBegin(t), Background: drawBackground(t), ContentHash: hash32(t, "content"), Judgement: drawJudgement(t), Software: name(t, "software"),
		PartType: inspection.Applied{PartTypeRef: inspection.PartTypeRef{Name: name(t, "applied"), Version: rapid.IntRange(0, 1<<30).Draw(t, "applied version")}, Hash: hash32(t, "part type hash")},
		Sequence: rapid.Uint64().Draw(t, "sequence"), RecordedAt: when(t, "recorded at"), Attempt: rapid.IntRange(0, 1<<30).Draw(t, "attempt"), Caller: name(t, "caller"),
		Sweeps: several(t, "sweeps", func(t *rapid.T) inspection.SweepHeader {
			return drawHeader(t, rapid.IntRange(1, sweep.MaxPoints).Draw(t, "points"))
		}),
	}
	if r.Begin.Calibration != "" {
		r.CalibrationHash = hash32(t, "calibration hash")
	}
	return r
}
