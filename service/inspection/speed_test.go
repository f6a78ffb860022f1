package inspection_test

import (
	"math/rand/v2"
	"testing"
	"time"

	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
)

// BenchmarkJudge measures a judgement of a main sweep alone, and of a drive series with an overtone window.
func BenchmarkJudge(b *testing.B) {
	for name, sections := range map[string]string{"main": "", "series": driveSection + overtoneSection("resistance-ratio", 10)} {
		k := simulated.Scenario()[2]
		s := simulated.NewStation("N1", "North", k, rand.New(rand.NewPCG(1, 2)))
		source, err := simulated.LimitsFile(k.PartType)
		if err != nil {
			b.Fatal(err)
		}
		part, err := parttype.Parse(k.PartType, append(source, sections...))
		if err != nil {
			b.Fatal(err)
		}
		cal := s.Calibrate("c", measuredAt.Add(-time.Hour), about(thirdOvertone(), 0.014, 41))
		f := &floor{Station: s, base: inspection.Case{
			Begin:    inspection.Begin{ContactHead: "N1-A", Calibration: "c", MeasuredAt: measuredAt},
			PartType: part, Calibration: &cal,
		}}
		c := f.base
		if sections == "" {
			c.Sweeps = []sweep.Sweep{s.Measure(f.nominal(nil), s.Window(401))}
		} else {
			in := f.nominal(nil)
			in.Unit = simulated.WithOvertone(in.Unit, 1, 3, 0.0028, 160)
			c.Sweeps = append(f.series(in), s.MeasureAt(in, about(thirdOvertone(), 0.01, 2001), sweep.Overtone, 3, s.SourcePowerDBm))
		}
		b.Run(name, func(b *testing.B) {
			judge := inspection.NewJudge()
			b.ReportAllocs()
			for b.Loop() {
				if _, err := judge.Judge(b.Context(), &c); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
