package sweep

import (
	"math"
	"strings"
	"testing"
	"time"
)

// good returns an admissible main sweep of n points.
func good(n int) Sweep {
	s := Sweep{Role: Main, Quantity: S21}
	for i := range n {
		s.FrequencyHz = append(s.FrequencyHz, 25e6+float64(i))
		s.Re, s.Im = append(s.Re, 0.01), append(s.Im, -0.02)
	}
	return s
}

func TestGoodSweepsAreAdmissible(t *testing.T) {
	falling := good(11)
	for i := range falling.FrequencyHz {
		falling.FrequencyHz[i] = 25e6 - float64(i)
	}
	repeated := good(11)
	for i := range repeated.FrequencyHz {
		repeated.FrequencyHz[i] = 25e6 + float64(i/2)
	}
	repeated.Grid = &Grid{StartHz: 25e6, StopHz: 25e6 + 5, Points: 11}
	magnitude := good(11)
	magnitude.Quantity, magnitude.Im = S21Magnitude, nil
	drive := good(MinPoints)
	drive.Role, drive.DriveStep = Drive, 3
	window := good(11)
	window.Role, window.FrequencyRatio = Overtone, 6.27
	most := good(MaxPoints)
	for name, s := range map[string]Sweep{"plain": good(11), "falling": falling, "repeated with a grid": repeated, "magnitude": magnitude, "drive": drive, "ratio": window, "most points": most} {
		if f := s.Check(); len(f) > 0 {
			t.Errorf("%s: %v", name, f)
		}
	}
}

func TestBadSweepsNameTheField(t *testing.T) {
	power := 300.0
	for name, c := range map[string]struct {
		change func(*Sweep)
		want   string
	}{
		"role":               {func(s *Sweep) { s.Role = "other" }, `role: want one of`},
		"quantity":           {func(s *Sweep) { s.Quantity = "" }, `quantity: want one of`},
		"phase":              {func(s *Sweep) { s.Timing.Phase = "random" }, `source_phase: want`},
		"one point":          {func(s *Sweep) { *s = good(1) }, "points: want 9 to 200001, got 1"},
		"no points":          {func(s *Sweep) { *s = good(0) }, "points: want 9 to 200001, got 0"},
		"too many":           {func(s *Sweep) { *s = good(MaxPoints + 1) }, "got 200002"},
		"missing samples":    {func(s *Sweep) { s.Im = s.Im[:3] }, "samples: want one sample for each of 11"},
		"phase of magnitude": {func(s *Sweep) { s.Quantity = S21Magnitude }, "samples: want"},
		"NaN sample":         {func(s *Sweep) { s.Im[4] = math.NaN() }, "samples: want finite"},
		"infinite sample":    {func(s *Sweep) { s.Re[4] = math.Inf(1) }, "at point 4"},
		"huge sample":        {func(s *Sweep) { s.Re[4] = 1e308 }, "modulus up to"},
		"NaN frequency":      {func(s *Sweep) { s.FrequencyHz[2] = math.NaN() }, "frequency_hz: want finite values from 1 to 1e12, got NaN at point 2"},
		"zero frequency":     {func(s *Sweep) { s.FrequencyHz[0] = 0 }, "frequency_hz"},
		"no span": {func(s *Sweep) {
			for i := range s.FrequencyHz {
				s.FrequencyHz[i] = 1e6
			}
			s.Grid = &Grid{1e6, 1e6, 11}
		}, "a span above 0"},
		"repeated":        {func(s *Sweep) { s.FrequencyHz[5] = s.FrequencyHz[4] }, "no frequency twice in a row"},
		"grid":            {func(s *Sweep) { s.Grid = &Grid{1, 2, 12} }, "grid: want finite ends and 11 points"},
		"order":           {func(s *Sweep) { s.Order = 3 }, "order: want none"},
		"overtone":        {func(s *Sweep) { s.Role = Overtone }, "order: want an order above 0 or"},
		"drive step":      {func(s *Sweep) { s.DriveStep = 1 }, "drive_step: want"},
		"power":           {func(s *Sweep) { s.SourcePowerDBm = &power }, "source_power_dbm: want -200 to 60, got 300"},
		"averaging":       {func(s *Sweep) { s.Timing = Timing{Dwell: time.Millisecond, Averaging: time.Second} }, "dwell: want"},
		"below magnitude": {func(s *Sweep) { s.Quantity, s.Im, s.Re[3] = S21Magnitude, nil, -1 }, "magnitudes of at least 0"},
	} {
		s := good(11)
		c.change(&s)
		faults := s.Check()
		found := false
		for _, f := range faults {
			found = found || strings.Contains(f.Error(), c.want)
		}
		if !found {
			t.Errorf("%s: %v, want one with %q", name, faults, c.want)
		}
	}
}

// TestGridEnds: both ends are exact whatever the step.
func TestGridEnds(t *testing.T) {
	g := Grid{StartHz: 9.99e6, StopHz: 10.02e6, Points: 6401}
	if g.At(0) != g.StartHz || g.At(6400) != g.StopHz || math.Abs(g.At(1)-g.At(0)-4.6875) > 1e-6 {
		t.Errorf("ends %v %v, step %v", g.At(0), g.At(6400), g.At(1)-g.At(0))
	}
}
