package storagetest

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"pgregory.net/rapid"

	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// roundTrip records whatever an inspection may be, and wants it back as it was.
func roundTrip(s *scene) {
	rapid.Check(s.T, func(t *rapid.T) {
		s.made++
		b := drawBegin(t)
		b.ID = newID(s.made)
		sweeps := make([]sweep.Sweep, rapid.IntRange(1, 4).Draw(t, "sweeps"))
		for i := range sweeps {
			sweeps[i] = drawSweep(t)
		}
		m := s.of(b, sweeps, drawJudgement(t))
		answer, err := s.Record(s.Context(), m.Record, m.Sweeps)
		if err != nil {
			t.Fatalf("recording: %v", err)
		}
		found, ok, err := s.Find(s.Context(), b.ID)
		if err != nil || !ok {
			t.Fatalf("found: %v, error %v", ok, err)
		}
		got, err := s.Sweeps(s.Context(), b.ID)
		if err != nil {
			t.Fatalf("sweeps: %v", err)
		}
		for _, d := range []string{diff(m.as(answer.Record), answer.Record), diff(answer.Record, found), diff(sweeps, got)} {
			if d != "" {
				t.Fatalf("it came back otherwise (-want +got):\n%s", d)
			}
		}
	})
}

// name draws a name a person may give: printable, at most 128 bytes.
func name(least int) *rapid.Generator[string] {
	return rapid.Custom(func(t *rapid.T) string {
		text := rapid.StringOfN(rapid.RuneFrom([]rune("ABC012-_ .µß字😀\u00a0")), least, 40, inspection.MaxText).Draw(t, "name")
		return strings.Clone(text)
	})
}

// finite draws any float64 that is a number, often one at an edge.
func finite() *rapid.Generator[float64] {
	return rapid.OneOf(
		rapid.Float64Range(-math.MaxFloat64, math.MaxFloat64),
		rapid.SampledFrom([]float64{0, math.Copysign(0, -1), math.SmallestNonzeroFloat64, -math.MaxFloat64, 1.0 / 3}),
	)
}

// positive draws a number above 0.
func positive(most float64) *rapid.Generator[float64] {
	return rapid.Float64Range(math.SmallestNonzeroFloat64, most)
}

func maybe[T any](t *rapid.T, g *rapid.Generator[T], label string) *T {
	if !rapid.Bool().Draw(t, label+"?") {
		return nil
	}
	v := g.Draw(t, label)
	return &v
}

func drawBegin(t *rapid.T) inspection.Begin {
	b := inspection.Begin{
		Purpose: rapid.SampledFrom(inspection.Purposes()).Draw(t, "purpose"),
		Unit: inspection.UnitID{
			Lot: inspection.Lot(name(1).Draw(t, "lot")), Carrier: name(1).Draw(t, "carrier"), Pocket: rapid.IntRange(1, 1000000).Draw(t, "pocket"),
			Attempt: rapid.IntRange(0, 1000).Draw(t, "attempt"),
		},
		Station: inspection.StationID(name(1).Draw(t, "station")), ContactHead: inspection.ContactHead(name(1).Draw(t, "head")),
		Operator: name(0).Draw(t, "operator"), PartType: inspection.PartTypeRef{Name: partTypeName, Version: rapid.IntRange(0, 1).Draw(t, "version")},
		MeasuredAt:   time.Unix(rapid.Int64Range(0, 7258118399).Draw(t, "s"), rapid.Int64Range(0, 999999999).Draw(t, "ns")).UTC(),
		AnswerWithin: time.Duration(rapid.Int64Range(0, int64(time.Hour)).Draw(t, "within")),
	}
	b.ReferenceLock = maybe(t, rapid.Bool(), "locked")
	if rapid.Bool().Draw(t, "serial?") {
		b.Unit = inspection.UnitID{Serial: inspection.Serial(name(1).Draw(t, "serial")), Lot: inspection.Lot(name(0).Draw(t, "lot"))}
	}
	if rapid.Bool().Draw(t, "calibrated") {
		b.Calibration = "N1-A-2026-11-30"
	}
	if rapid.Bool().Draw(t, "temperature?") {
		b.Temperature = &inspection.Temperature{Celsius: rapid.Float64Range(-500, 500).Draw(t, "c"), StandardUncertainty: rapid.Float64Range(0, 100).Draw(t, "u")}
	}
	if rapid.Bool().Draw(t, "offline?") {
		j := drawJudgement(t)
		b.Offline = &j
	}
	return b
}

func drawSweep(t *rapid.T) sweep.Sweep {
	n := rapid.IntRange(sweep.MinPoints, 300).Draw(t, "points")
	w := sweep.Sweep{
		Role: rapid.SampledFrom(sweep.Roles()).Draw(t, "role"), Quantity: rapid.SampledFrom(sweep.Quantities()).Draw(t, "quantity"),
		SourcePowerDBm: maybe(t, rapid.Float64Range(-200, 60), "power"),
		Timing: sweep.Timing{
			Dwell: duration(t, "dwell"), Averaging: duration(t, "averaging"), LeadIn: duration(t, "lead-in"),
			Phase: rapid.SampledFrom(append(sweep.SourcePhases(), sweep.PhaseUnstated)).Draw(t, "phase"),
		},
	}
	switch w.Role {
	case sweep.Drive:
		w.DriveStep = rapid.IntRange(0, 63).Draw(t, "step")
	case sweep.Overtone:
		if rapid.Bool().Draw(t, "by ratio") {
			w.FrequencyRatio = positive(100).Draw(t, "ratio")
		} else {
			w.Order = rapid.IntRange(1, 99).Draw(t, "order")
		}
	}
	if rapid.Bool().Draw(t, "grid?") {
		w.Grid = &sweep.Grid{StartHz: rapid.Float64Range(1, 1e12).Draw(t, "start"), StopHz: rapid.Float64Range(1, 1e12).Draw(t, "stop"), Points: n}
	}
	for i := range n {
		f := rapid.Float64Range(1, 1e12)
		if w.Grid != nil {
			w.FrequencyHz = append(w.FrequencyHz, w.Grid.At(i))
		} else {
			w.FrequencyHz = append(w.FrequencyHz, f.Draw(t, "f"))
		}
	}
	w.Re = samples(t, n)
	if w.Quantity.Complex() {
		w.Im = samples(t, n)
	}
	return w
}

// samples draws numbers such as a receiver gives: of full precision, or of 24 bits, with edges in between.
func samples(t *rapid.T, n int) []float64 {
	short := rapid.Bool().Draw(t, "24 bits")
	values := rapid.SliceOfN(finite(), n, n).Draw(t, "samples")
	if short {
		for i, v := range values {
			if f := float64(float32(v)); !math.IsInf(f, 0) {
				values[i] = f
			}
		}
	}
	return values
}

func duration(t *rapid.T, label string) time.Duration {
	return time.Duration(rapid.Int64Range(0, int64(100*time.Second)).Draw(t, label))
}

func drawValue(t *rapid.T) verdict.Value {
	return verdict.Value{Value: finite().Draw(t, "value"), StandardUncertainty: finite().Draw(t, "u")}
}

// drawJudgement draws a judgement with nothing in it that the wire leaves out.
func drawJudgement(t *rapid.T) verdict.Judgement {
	j := verdict.Judgement{
		Verdict: rapid.SampledFrom(verdict.Verdicts()).Draw(t, "verdict"), Grade: name(0).Draw(t, "grade"), ScaleUnknown: rapid.Bool().Draw(t, "no scale"),
		Remarks: rapid.SliceOfN(name(0), 0, 3).Draw(t, "remarks"),
	}
	for range rapid.IntRange(0, 3).Draw(t, "findings") {
		j.Findings = append(j.Findings, drawFinding(t))
	}
	for range rapid.IntRange(0, 2).Draw(t, "causes") {
		j.RetestCauses = append(j.RetestCauses, verdict.NewCause(rapid.SampledFrom(verdict.Causes()).Draw(t, "cause"), name(0).Draw(t, "text")))
	}
	if rapid.Bool().Draw(t, "main?") {
		m := &verdict.Main{MotionalResonanceHz: drawValue(t), QualityFactor: drawValue(t)}
		if !j.ScaleUnknown {
			for _, v := range []*verdict.Value{&m.MotionalResistanceOhm, &m.MotionalInductanceHenry, &m.MotionalCapacitanceFarad, &m.ShuntCapacitanceFarad,
				&m.FigureOfMerit, &m.ParallelResonanceHz} {
				*v = drawValue(t)
			}
			if rapid.Bool().Draw(t, "zero phase") {
				m.ResonanceHz, m.ResonanceResistanceOhm, m.AntiresonanceHz = ptr(drawValue(t)), ptr(drawValue(t)), ptr(drawValue(t))
			}
		}
		j.Main = m
	}
	if rapid.Bool().Draw(t, "load?") {
		j.Load = &verdict.Load{
			LoadCapacitanceFarad: finite().Draw(t, "load"), Connection: rapid.SampledFrom([]string{"series", "parallel"}).Draw(t, "connection"),
			LoadResonanceHz: drawValue(t), LoadResonanceResistanceOhm: drawValue(t), PullingSensitivityPPMPerPF: drawValue(t),
		}
	}
	for i := range rapid.IntRange(0, 3).Draw(t, "drive") {
		j.Drive = append(j.Drive, verdict.DriveReading{Step: i, PowerWatt: drawValue(t), MotionalResistanceOhm: drawValue(t), MotionalResonanceHz: drawValue(t)})
	}
	for i := range rapid.IntRange(0, 2).Draw(t, "modes") {
		j.Modes = append(j.Modes, verdict.ModeReading{Kind: []string{"overtone", "unwanted"}[i], Order: 3 - 3*i, FrequencyHz: drawValue(t), ResistanceOhm: drawValue(t), SuppressionDB: drawValue(t)})
	}
	for range rapid.IntRange(0, 2).Draw(t, "observability") {
		j.Observability = append(j.Observability, verdict.Observability{FromHz: finite().Draw(t, "from"), ToHz: finite().Draw(t, "to"), NarrowestWidthHz: finite().Draw(t, "width")})
	}
	if rapid.Bool().Draw(t, "quality?") {
		j.Quality = &verdict.Quality{SNRDecibel: finite().Draw(t, "snr"), ReducedChiSquare: finite().Draw(t, "chi"), SettlingTimeConstants: positive(1e9).Draw(t, "settling")}
	}
	for i := range rapid.IntRange(0, 3).Draw(t, "budget") {
		j.Budget = append(j.Budget, verdict.BudgetLine{Source: fmt.Sprint("influence ", i), MotionalResonanceHz: finite().Draw(t, "share")})
	}
	return j
}

func drawFinding(t *rapid.T) verdict.Finding {
	f := verdict.Finding{
		Quantity: rapid.SampledFrom([]parttype.Quantity{parttype.MotionalResistance, parttype.DriveResistanceRatio, parttype.OvertoneSuppression}).Draw(t, "quantity"),
		Where:    verdict.Nowhere, Unit: rapid.SampledFrom([]string{"ohm", "ppm", "dB", "1"}).Draw(t, "unit"),
		Bounds:  parttype.Bounds{Min: maybe(t, finite(), "min"), Max: maybe(t, finite(), "max")},
		Outcome: rapid.SampledFrom(slices.Clone(verdict.Outcomes())).Draw(t, "outcome"), Text: name(0).Draw(t, "text"),
	}
	if rapid.Bool().Draw(t, "value?") {
		f.HasValue, f.Measured = true, drawValue(t)
		if f.Outcome != verdict.Suspended {
			f.ConformanceProbability = rapid.Float64Range(0, 1).Draw(t, "probability")
		}
	}
	switch rapid.IntRange(0, 3).Draw(t, "where") {
	case 1:
		f.Where.DriveStep = rapid.IntRange(0, 63).Draw(t, "step")
	case 2:
		f.Where.Order = rapid.IntRange(1, 99).Draw(t, "order")
	case 3:
		f.Where.FrequencyRatio, f.Where.FromHz, f.Where.ToHz = positive(100).Draw(t, "ratio"), finite().Draw(t, "from"), 1
	}
	return f
}
