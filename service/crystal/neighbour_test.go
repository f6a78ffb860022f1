package crystal_test

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"
	"testing"

	"example.com/admit/service/crystal"
)

// scan finds the same root as the package by looking everywhere: it evaluates the reactance on a dense grid over the search
// window and picks, of all sign changes in the right direction at which the main arm carries its part of the current, the one
// nearest to the root of the main mode alone. It returns the cell that holds the root.
func scan(u crystal.Unit, load float64, connection crystal.LoadConnection, rising bool, aloneHz float64) (low, high float64, ok bool) {
	main := u.Modes[0]
	window := 2*math.Abs(aloneHz-main.ResonanceHz) + 2*main.BandwidthHz()
	var grid []float64
	for k := range 8001 {
		grid = append(grid, aloneHz+window*(float64(k)/4000-1))
	}
	// Logarithmic around each mode and around the root alone, from a hundredth of the bandwidth outwards.
	centers := []float64{aloneHz}
	for _, m := range u.Modes {
		centers = append(centers, m.ResonanceHz)
	}
	for k, center := range centers {
		width := main.BandwidthHz()
		if k > 0 {
			width = u.Modes[k-1].BandwidthHz()
		}
		for d := width / 100; d < window; d *= 1.01 {
			grid = append(grid, center-d, center+d)
		}
	}
	grid = slices.DeleteFunc(grid, func(f float64) bool { return math.Abs(f-aloneHz) > window })
	slices.Sort(grid)

	phase := func(f float64) float64 {
		w := 2 * math.Pi * f
		switch connection {
		case crystal.SeriesLoad:
			return imag(u.Impedance(f)) - 1/(w*load)
		case crystal.ParallelLoad:
			return -imag(u.Admittance(f)) - w*load
		}
		return imag(u.Impedance(f))
	}
	mainTakesPart := func(f float64) bool {
		for _, m := range u.Modes {
			if 2*cmplx.Abs(m.Impedance(f)) < cmplx.Abs(main.Impedance(f)) {
				return false
			}
		}
		return true
	}
	best := math.Inf(1)
	value := phase(grid[0])
	for k := 1; k < len(grid); k++ {
		next := phase(grid[k])
		middle := (grid[k-1] + grid[k]) / 2
		if (value < 0) != (next < 0) && (value < 0) == rising && mainTakesPart(middle) && math.Abs(middle-aloneHz) < best {
			best, low, high, ok = math.Abs(middle-aloneHz), grid[k-1], grid[k], true
		}
		value = next
	}
	return low, high, ok
}

// TestNearestRootAmongNeighbours compares the search, which walks a few dozen steps, with a scan of the whole window for
// units whose neighbours stand on and between the frequencies searched for.
func TestNearestRootAmongNeighbours(t *testing.T) {
	random := rand.New(rand.NewPCG(4, 4))
	cases := 300
	if testing.Short() {
		cases = 60
	}
	found, absent, shifted := 0, 0, 0
	for n := range cases {
		u := randomUnit(random, 2+n%4)
		alone := u
		alone.Modes = u.Modes[:1]
		load := u.ShuntCapacitanceFarad * math.Pow(10, 2*random.Float64()-0.5)
		lone := zeroPhaseSearches(alone, load)
		for k, s := range zeroPhaseSearches(u, load) {
			start, _, err := lone[k].search()
			if err != nil {
				continue
			}
			low, high, ok := scan(u, s.load, s.connection, s.rising, start)
			frequency, _, err := s.search()
			switch {
			case !ok:
				absent++
				if err != crystal.ErrNoZeroPhase {
					t.Errorf("unit %d, %s: %.12g Hz (%v), the scan found none", n, s.name, frequency, err)
				}
			case err != nil:
				t.Errorf("unit %d, %s: %v, the scan found %.12g Hz", n, s.name, err, low)
			case frequency < low-1e-15*low || frequency > high+1e-15*high:
				t.Errorf("unit %d, %s: %.15g Hz, the scan found %.15g to %.15g Hz; alone %.15g", n, s.name, frequency, low, high, start)
			default:
				found++
				if math.Abs(frequency-start) > 0.01*math.Abs(start-u.Modes[0].ResonanceHz) {
					shifted++
				}
			}
		}
	}
	t.Logf("%d agree on a root, %d of them moved by more than 1 %% by neighbours; %d agree on none", found, shifted, absent)
	if shifted < cases/10 {
		t.Errorf("only %d roots moved by neighbours: the test does not reach what it is for", shifted)
	}
}

// TestPairBesideTheStart: the neighbours leave a close pair of zero-phase frequencies just below the root of the mode alone,
// nearer than one step of the search.
func TestPairBesideTheStart(t *testing.T) {
	for _, c := range []struct {
		unit crystal.Unit
		load float64
	}{
		{crystal.Unit{Modes: []crystal.Mode{
			{ResonanceHz: 124679542.51665, ResistanceOhm: 10.12249, InductanceHenry: 109.767424e-6},
			{ResonanceHz: 125133715.34886, ResistanceOhm: 54.12334, InductanceHenry: 55.5915988e-6}},
			ShuntCapacitanceFarad: 11.6507123e-12, ShuntConductanceSiemens: 264.308e-9, LeadInductanceHenry: 0.459557e-9}, 7.7230243e-12},
		{crystal.Unit{Modes: []crystal.Mode{
			{ResonanceHz: 23000176.16361, ResistanceOhm: 12.36551, InductanceHenry: 2.214288615e-3},
			{ResonanceHz: 23021653.32872, ResistanceOhm: 6.12741, InductanceHenry: 0.882999659e-3},
			{ResonanceHz: 23011011.35676, ResistanceOhm: 62.7082, InductanceHenry: 26.54776970e-3}},
			ShuntCapacitanceFarad: 66.75826e-12, ShuntConductanceSiemens: 2.323195e-6, LeadInductanceHenry: 0.801945e-9}, 60.33912e-12},
	} {
		alone := c.unit
		alone.Modes = c.unit.Modes[:1]
		start, _, err := alone.LoadResonance(c.load, crystal.SeriesLoad)
		if err != nil {
			t.Fatal(err)
		}
		low, high, ok := scan(c.unit, c.load, crystal.SeriesLoad, true, start)
		if !ok || start-low > 0.1*(start-c.unit.Modes[0].ResonanceHz) {
			t.Fatalf("no pair beside the start %.12g: %.12g", start, low)
		}
		frequency, _, err := c.unit.LoadResonance(c.load, crystal.SeriesLoad)
		if err != nil || frequency < low || frequency > high {
			t.Errorf("%.12g Hz (%v), the scan found %.12g to %.12g Hz", frequency, err, low, high)
		}
	}
}
