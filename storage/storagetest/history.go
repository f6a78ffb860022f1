package storagetest

import (
	"fmt"

	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
)

// ofUnit: a unit is known by its serial, or by lot, carrier and pocket; part type and purpose part its histories.
func ofUnit(c *scene) {
	t, s, plant := c.T, c.Backend, c.Plant
	pocket := inspection.UnitID{Lot: "L2601", Carrier: "C07", Pocket: 1}
	for _, change := range []func(*inspection.Begin){
		func(*inspection.Begin) {},
		func(b *inspection.Begin) { b.PartType.Name = "TM-12M288-F16" },
		func(b *inspection.Begin) { b.Purpose = inspection.Engineering },
		func(b *inspection.Begin) { b.Unit.Serial = "TM0000002" },
		func(b *inspection.Begin) { b.Unit = pocket },
		func(b *inspection.Begin) { b.Unit.Lot = "L2602" },
	} {
		m := plant.Inspection(func(b *inspection.Begin) {
			b.Unit = inspection.UnitID{Serial: "TM0000001", Lot: "L2601"}
			change(b)
		}).Retest(verdict.TooNoisy)
		if kept, err := s.Record(t.Context(), m.Record, m.Sweeps); err != nil || kept.Already {
			t.Fatal(kept.Already, err)
		}
	}
	serial := inspection.UnitID{Serial: "TM0000001", Lot: "L2609"}
	for _, c := range []struct {
		name     string
		purpose  inspection.Purpose
		unit     inspection.UnitID
		partType string
		limit    int
		want     string
	}{
		{"by serial, whatever the lot", inspection.Production, serial, "TM-25M000-F10", 9, "61"},
		{"the newest", inspection.Production, serial, "TM-25M000-F10", 1, "6"},
		{"another part type", inspection.Production, serial, "TM-12M288-F16", 9, "2"},
		{"another purpose", inspection.Engineering, serial, "TM-25M000-F10", 9, "3"},
		{"by pocket", inspection.Production, pocket, "TM-25M000-F10", 9, "5"},
		{"never seen", inspection.Production, inspection.UnitID{Serial: "TM0000009"}, "TM-25M000-F10", 9, ""},
	} {
		page, err := s.OfUnit(t.Context(), c.purpose, c.unit, c.partType, c.limit)
		got := ""
		for _, r := range page {
			got += fmt.Sprint(r.Sequence)
		}
		if err != nil || got != c.want {
			t.Errorf("%s: %s (%v), want %s", c.name, got, err, c.want)
		}
	}
}
