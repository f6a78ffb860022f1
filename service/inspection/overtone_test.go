package inspection_test

import (
	"testing"

	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/sweep"
)

const overtoneSection = `
overtones:
  - {order: 3, suppression_db: {min: 10}, definition: resistance-ratio}
`

func TestExploreOvertones(t *testing.T) {
	centre := 3 * simulated.Scenario()[2].ResonanceHz()
	band := sweep.Grid{StartHz: centre * 0.985, StopHz: centre * 1.015, Points: 41}
	window := sweep.Grid{StartHz: centre * 0.99, StopHz: centre * 1.01, Points: 3001}
	f := newFloor(t, 2, 1, overtoneSection, band)
	for _, ohm := range []float64{40, 162, 500, 3000, 20000, 0} {
		in := f.nominal(nil)
		if ohm > 0 {
			in.Unit = simulated.WithOvertone(in.Unit, 1, 3, 0.0028, ohm)
		}
		main := f.MeasureAt(in, f.Window(401), sweep.Main, 0, f.SourcePowerDBm)
		shunt := f.MeasureAt(in, sweep.Grid{StartHz: band.StartHz, StopHz: band.StartHz * 1.003, Points: 41}, sweep.ShuntCapacitance, 0, f.SourcePowerDBm)
		over := f.MeasureAt(in, window, sweep.Overtone, 3, f.SourcePowerDBm)
		j := f.inspect(f.with(main, over, shunt))
		t.Logf("%g ohm: %s\n%+v %+v\n", ohm, told(j), j.Modes, j.Observability)
		if j.Order != nil {
			t.Log(j.Order.Text, j.Order.Candidates)
		}
	}
	for kind, k := range simulated.Scenario() {
		f := newFloor(t, kind, 1, "")
		j := f.inspect(f.with(f.MeasureAt(f.nominal(func(*crystal.Mode, *crystal.Unit) {}), f.Window(401), sweep.Main, 0, f.SourcePowerDBm)))
		if j.Order != nil {
			t.Log(k.PartType, j.Order.Text, j.Order.Candidates)
		}
	}
}
