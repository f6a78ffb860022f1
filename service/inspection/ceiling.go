package inspection

import (
	"fmt"
	"math"

	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
)

// checkCeiling refuses a sweep whose source power could put more than the part type's maximum_drive_level into the R1 of a unit, whatever unit of
// this kind it is: the power is not known before the first fit, and a unit that was overdriven stays so. The worst R1 is the termination,
// where that is plausible. A sweep in an unknown network, or without a stated source power, cannot be checked.
func checkCeiling(p *parttype.PartType, cal *network.Calibration, s *sweep.Sweep, field string) error {
	if s.SourcePowerDBm == nil || cal == nil {
		return nil
	}
	drive, err := cal.Drive()
	if err != nil {
		return nil
	}
	low, high := plausibleOhm(p)
	watt, ohm := drive.WorstPowerWatt(*s.SourcePowerDBm, low, high)
	if !(watt > p.MaximumDriveWatt*(1+ceilingRounding)) {
		return nil
	}
	allowed := *s.SourcePowerDBm + 10*math.Log10(p.MaximumDriveWatt/watt)
	return Faultf(Malformed, field+".source_power_dbm", "want at most %.2f dBm, so that no unit takes more than the maximum_drive_level of %g W; %g dBm put %.3g W into %.3g ohm",
		math.Floor(100*allowed)/100, p.MaximumDriveWatt, *s.SourcePowerDBm, watt, ohm)
}

// ceilingRounding allows for source powers that are printed to a hundredth of a decibel.
const ceilingRounding = 0.0025

// plausibleOhm returns the R1 that a unit in the contact head may have: from a tenth of the lowest to ten times the highest resistance that the part
// type names, since bad units are inserted too; without any, every R1.
func plausibleOhm(p *parttype.PartType) (low, high float64) {
	low, high = math.Inf(1), 0
	take := func(b parttype.Bounds) {
		for _, ohm := range []*float64{b.Min, b.Max} {
			if ohm != nil && *ohm > 0 {
				low, high = math.Min(low, *ohm), math.Max(high, *ohm)
			}
		}
	}
	for _, l := range p.Limits {
		switch l.Quantity {
		case parttype.MotionalResistance, parttype.ResonanceResistance, parttype.LoadResonanceResistance:
			take(l.Bounds)
		}
	}
	if p.Drive != nil {
		take(p.Drive.MotionalResistance)
	}
	if high == 0 {
		return 0, math.Inf(1)
	}
	return low / 10, 10 * high
}

// overtoneReach is how far from a whole multiple of the fundamental an overtone is looked for, as a share of it. Overtones of plates lie from
// half a percent below to some tenths above.
const overtoneReach = 0.01

// CheckReach refuses an inspection whose calibration does not reach the overtone windows that the part type asks for, before a unit is measured for
// nothing. The fault names the limit; a calibration without standards reaches everywhere.
func CheckReach(p *parttype.PartType, cal *network.Calibration) error {
	if cal == nil || len(cal.Standards) == 0 {
		return nil
	}
	for i := range p.Overtones {
		o := &p.Overtones[i]
		centre := overtoneCentreHz(o, p, p.NominalFrequencyHz)
		for _, kind := range []network.StandardKind{network.Open, network.Short, network.Load} {
			if !reaches(cal, kind, centre*(1-0.9*overtoneReach), centre*(1+0.9*overtoneReach)) {
				return Faultf(Malformed, fmt.Sprintf("part_type.overtones[%d]", i), "want a calibration that covers the window about %.6g Hz; %s of %s does not reach it", centre, kind, cal.ID)
			}
		}
	}
	return nil
}

// reaches reports whether the sweeps of one kind of standard cover a band together. A kind that was not read at all is no gap of this band.
func reaches(cal *network.Calibration, kind network.StandardKind, low, high float64) bool {
	read := false
	at := low
	for progress := true; progress; {
		progress = false
		for i := range cal.Standards {
			s := &cal.Standards[i]
			if s.Kind != kind || len(s.FrequencyHz) == 0 {
				continue
			}
			read = true
			if first, last := s.FrequencyHz[0], s.FrequencyHz[len(s.FrequencyHz)-1]; first <= at && last > at {
				at, progress = last, true
			}
		}
	}
	return !read || at >= high
}

// overtoneCentreHz returns where an overtone is expected when the main mode lies at a frequency: at its multiple of the fundamental, or at the stated
// ratio to the main mode.
func overtoneCentreHz(o *parttype.OvertoneLimit, p *parttype.PartType, mainHz float64) float64 {
	if o.FrequencyRatio > 0 {
		return mainHz * o.FrequencyRatio
	}
	return mainHz * float64(o.Order) / float64(p.Overtone)
}
