package crystal_test

import (
	"math/rand/v2"
	"testing"

	"example.com/admit/service/crystal"
)

// BenchmarkAdmittance is the price of one point of a forward model without a fixture.
func BenchmarkAdmittance(b *testing.B) {
	u := randomUnit(rand.New(rand.NewPCG(15, 15)), 1)
	frequency := u.Modes[0].ResonanceHz * 1.00001
	var total complex128
	for b.Loop() {
		total += u.Admittance(frequency)
	}
}

func BenchmarkLoadResonance(b *testing.B) {
	for _, c := range []struct {
		name  string
		modes int
	}{{"alone", 1}, {"4-neighbours", 5}, {"19-neighbours", 20}} {
		b.Run(c.name, func(b *testing.B) {
			u := randomUnit(rand.New(rand.NewPCG(15, 15)), c.modes)
			b.ReportAllocs()
			for b.Loop() {
				if _, _, err := u.LoadResonance(3*u.ShuntCapacitanceFarad, crystal.SeriesLoad); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
