// Package plan says which sweeps a part type asks for. The programme is fixed: it follows from the limits file and from what the station is, not from
// what the unit turns out to be, so that it can be given before the first sample. Finding the unit and every sweep before the drive series use
// at most its lowest level; windows are no wider than the limits need, and their steps no finer.
package plan

import (
	"math"
	"time"

	"example.com/admit/service/crystal"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
)

// Station is what a programme depends on beside the part type.
type Station struct {
	Drive network.Drive  // how the source drives the unit; of a calibration, or of the nominal network
	Bands []network.Band // that are calibrated; nil: every frequency
}

// NominalStation returns the station of a network kind without a calibration; ok is false for an unknown network, of which no drive level is known.
func NominalStation(kind network.Kind) (s Station, ok bool) {
	drive, err := (&network.Calibration{Network: kind}).Drive()
	return Station{Drive: drive}, err == nil
}

// CalibratedStation returns the station of a calibration, with the bands that its standards cover; ok is false where the network is unknown.
func CalibratedStation(c *network.Calibration) (s Station, ok bool) {
	drive, err := c.Drive()
	if err != nil {
		return Station{}, false
	}
	s.Drive = drive
	if solved, err := network.Solve(c); err == nil {
		s.Bands = solved.Bands()
	}
	return s, true
}

// Sweep is one sweep that is asked for.
type Sweep struct {
	Role           sweep.Role
	Order          int     // of an overtone window
	FrequencyRatio float64 // of one given so
	DriveStep      int     // of a drive sweep
	Grid           sweep.Grid
	SourcePowerDBm float64
	Dwell          time.Duration
	Wait           time.Duration // before the sweep, with the source off
}

// What a programme allows for.
const (
	pointsPerWidth    = 10.0 // of the main mode in the main window
	driveWindowWidths = 3.0  // on either side of where the unit may be
	mainWindowWidths  = 5.0
	mostMainPoints    = 401
	driveShare        = 0.5  // of the points per width in a drive sweep
	overtoneReach     = 0.01 // on either side, as the judgement wants it covered
	settledConstants  = 7.0  // loaded time constants of a dwell
	unlimitedPPM      = 100  // how far units lie from their frequency where no limit says it
	usualRatio        = 280  // C0/C1 of a fundamental, times the square of the order
	usualShuntFarad   = 3e-12
	mostPoints        = 20001
)

// For returns the sweeps that a part type asks for at a station, in measuring order. With a drive section the levels come in its order, and the main
// sweep behind the first of them at the drive level, before any above it; without one the main sweep comes first. Then the overtone windows, and
// the shunt capacitance where it is limited and the station is calibrated away from the modes. Unwanted modes are not in it yet.
func For(p *parttype.PartType, s Station) []Sweep {
	e := expect(p, s)
	var all []Sweep
	main := e.main(p)
	if d := p.Drive; d != nil {
		all = e.series(p, d, main)
	} else {
		all = append(all, main)
	}
	for i := range p.Overtones {
		if w := e.overtone(p, &p.Overtones[i]); s.covers(w.Grid) {
			all = append(all, w)
		}
	}
	if w := e.shunt(); limits(p, parttype.ShuntCapacitance) && s.covers(w.Grid) {
		all = append(all, w)
	}
	return all
}

// covers reports whether a window lies within one calibrated band.
func (s Station) covers(g sweep.Grid) bool {
	if s.Bands == nil {
		return true
	}
	for _, b := range s.Bands {
		if b.LowHz <= g.StartHz && g.StopHz <= b.HighHz {
			return true
		}
	}
	return false
}

// expected is the unit that a part type leads one to expect, in a station.
type expected struct {
	station   Station
	p         *parttype.PartType
	unit      crystal.Unit
	widthHz   float64 // loaded
	low, high float64 // where fs may be, hertz
	ceiling   float64 // source power that is never exceeded, dBm
}

// expect makes the expected unit from the limits: the middle of a range, half of a largest value, the usual ratio of capacitances otherwise.
func expect(p *parttype.PartType, s Station) *expected {
	e := &expected{station: s, p: p}
	ohm := half(p, s.Drive.TerminationOhm, parttype.MotionalResistance, parttype.ResonanceResistance, parttype.LoadResonanceResistance)
	c0 := half(p, usualShuntFarad, parttype.ShuntCapacitance)
	c1 := half(p, c0/(usualRatio*float64(p.Overtone*p.Overtone)), parttype.MotionalCapacitance)
	fs := p.NominalFrequencyHz
	if load := p.Condition.LoadCapacitanceFarad; !p.Condition.SeriesResonance && load > 0 {
		fs /= math.Sqrt(1 + c1/(c0+load))
	}
	e.unit = crystal.Unit{Modes: []crystal.Mode{crystal.ModeFromCapacitance(fs, ohm, c1)}, ShuntCapacitanceFarad: c0}
	e.widthHz = e.unit.Modes[0].LoadedBandwidthHz(s.Drive.TerminationOhm)
	minPPM, maxPPM := -float64(unlimitedPPM), float64(unlimitedPPM)
	for _, l := range p.Limits {
		if l.Quantity != parttype.FrequencyDeviation {
			continue
		}
		if l.Bounds.Min != nil {
			minPPM = *l.Bounds.Min
		}
		if l.Bounds.Max != nil {
			maxPPM = *l.Bounds.Max
		}
	}
	// A unit that is out of its limit by as much again is still to be found, to be told how far out it is.
	spread := maxPPM - minPPM
	e.low, e.high = fs*(1+(minPPM-spread/2)*1e-6), fs*(1+(maxPPM+spread/2)*1e-6)
	worst, _ := s.Drive.WorstPowerWatt(0, 0, math.Inf(1))
	e.ceiling = math.Floor(1000*math.Log10(p.MaximumDriveWatt/worst)) / 100
	return e
}

// half returns the middle of the first of some limits that has two bounds, half of a largest or twice a least value, or what is usual.
func half(p *parttype.PartType, usual float64, quantities ...parttype.Quantity) float64 {
	for _, q := range quantities {
		for _, l := range p.Limits {
			switch b := l.Bounds; {
			case l.Quantity != q:
			case b.Min != nil && b.Max != nil:
				return (*b.Min + *b.Max) / 2
			case b.Max != nil:
				return *b.Max / 2
			case b.Min != nil && *b.Min > 0:
				return 2 * *b.Min
			}
		}
	}
	return usual
}

func limits(p *parttype.PartType, q parttype.Quantity) bool {
	for _, l := range p.Limits {
		if l.Quantity == q {
			return true
		}
	}
	return false
}

// power returns the source power for a level in the expected unit, to a hundredth of a decibel, and never above the ceiling.
func (e *expected) power(watt float64) float64 {
	return math.Min(math.Round(100*e.station.Drive.SourcePowerDBm(watt, e.unit.Modes[0].ResistanceOhm))/100, e.ceiling)
}

// dwell returns the settled dwell of a mode of a resistance, to the microsecond.
func (e *expected) dwell(m crystal.Mode) time.Duration {
	tau := m.LoadedTimeConstant(e.station.Drive.TerminationOhm)
	return time.Duration(math.Ceil(settledConstants*tau*1e6)) * time.Microsecond
}

// main returns the main sweep. That of a part with a load capacitance reaches the load resonance.
func (e *expected) main(p *parttype.PartType) Sweep {
	low, high := e.low-mainWindowWidths*e.widthHz, e.high+mainWindowWidths*e.widthHz
	if !p.Condition.SeriesResonance {
		high = math.Max(high, e.high+(p.NominalFrequencyHz-e.unit.Modes[0].ResonanceHz)+2*e.widthHz)
	}
	return Sweep{
		Role: sweep.Main, Grid: grid(low, high, e.widthHz/pointsPerWidth, mostMainPoints),
		SourcePowerDBm: e.power(p.DriveLevelWatt), Dwell: e.dwell(e.unit.Modes[0]),
	}
}

// grid returns a grid of a span with a step at most as wide as given, and no more points than most.
func grid(low, high, step float64, most int) sweep.Grid {
	n := int(math.Ceil((high-low)/step)) + 1
	return sweep.Grid{StartHz: low, StopHz: high, Points: max(sweep.MinPoints, min(n, most))}
}

// series returns the drive series with the main sweep in its place. The part type's wait follows every level above the drive level.
func (e *expected) series(p *parttype.PartType, d *parttype.Drive, main Sweep) []Sweep {
	wait := time.Duration(d.WaitSeconds * float64(time.Second))
	window := grid(e.low-driveWindowWidths*e.widthHz, e.high+driveWindowWidths*e.widthHz, e.widthHz/(driveShare*pointsPerWidth), mostMainPoints)
	place := len(d.LevelsWatt) - 1 // of the step behind which the main sweep stands
	for k, watt := range d.LevelsWatt {
		if watt >= p.DriveLevelWatt*(1-1e-6) {
			if place = k; watt > p.DriveLevelWatt*(1+1e-6) {
				place = k - 1 // no step at the drive level before a higher one
			}
			break
		}
	}
	var all []Sweep
	if place < 0 {
		// The series begins above the drive level: nothing may drive the unit before it.
		place = 0
	}
	loud := false
	for k, watt := range d.LevelsWatt {
		w := Sweep{Role: sweep.Drive, DriveStep: k, Grid: window, SourcePowerDBm: e.power(watt), Dwell: e.dwell(e.unit.Modes[0])}
		if loud {
			w.Wait = wait
		}
		loud = watt > p.DriveLevelWatt*(1+1e-6)
		all = append(all, w)
		if k == place {
			if loud {
				main.Wait = wait
			}
			all = append(all, main)
			loud = false
		}
	}
	return all
}

// overtone returns the window of an overtone. Its step resolves a response that is suppressed by just what the limit asks.
func (e *expected) overtone(p *parttype.PartType, o *parttype.OvertoneLimit) Sweep {
	main := e.unit.Modes[0]
	centre := main.ResonanceHz * float64(o.Order) / float64(p.Overtone)
	if o.FrequencyRatio > 0 {
		centre = main.ResonanceHz * o.FrequencyRatio
	}
	m := crystal.Mode{ResonanceHz: centre, ResistanceOhm: overtoneOhm(o, main.ResistanceOhm), InductanceHenry: main.InductanceHenry}
	// The centre is known to the spread of the units; a little more than the reach covers it wherever it lies.
	reach := overtoneReach + (e.high-e.low)/(2*main.ResonanceHz)
	return Sweep{
		Role: sweep.Overtone, Order: o.Order, FrequencyRatio: o.FrequencyRatio,
		Grid:           grid(centre*(1-reach), centre*(1+reach), m.LoadedBandwidthHz(e.station.Drive.TerminationOhm)/2, mostPoints),
		SourcePowerDBm: e.power(p.DriveLevelWatt), Dwell: e.dwell(m),
	}
}

// overtoneOhm returns the resistance of an overtone at its limit.
func overtoneOhm(o *parttype.OvertoneLimit, mainOhm float64) float64 {
	db := 0.0
	if o.SuppressionDB.Min != nil {
		db = math.Max(0, *o.SuppressionDB.Min)
	}
	added := 0.0
	switch o.Definition {
	case parttype.PiNetworkTransmission:
		added = network.PiNetwork.NominalTerminationOhm()
	case parttype.SeriesThroughTransmission:
		added = network.SeriesThrough.NominalTerminationOhm()
	}
	return (mainOhm+added)*math.Pow(10, db/20) - added
}

// shunt returns the sweep away from all modes: a tenth below the main mode, where neither its neighbours nor another overtone are.
func (e *expected) shunt() Sweep {
	centre := 0.9 * e.unit.Modes[0].ResonanceHz
	return Sweep{
		Role: sweep.ShuntCapacitance, Grid: sweep.Grid{StartHz: centre * 0.999, StopHz: centre * 1.001, Points: 21},
		SourcePowerDBm: e.power(e.p.DriveLevelWatt), Dwell: e.dwell(e.unit.Modes[0]),
	}
}
