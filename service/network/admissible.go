package network

import (
	"fmt"
	"math"
	"slices"

	"example.com/admit/service/sweep"
)

// leastSeparation is how far two standards must lie apart between open (0) and short (1) to count as two: 25 and 26 ohm in the
// pi-network are one.
const leastSeparation = 0.02

// needed is the number of distinct standards that three complex terms take.
const needed = 3

// Check returns every reason why the calibration is not admissible; none means that Solve will only find faults of the station. A
// calibration without standards is admissible: it is the nominal network.
func (c *Calibration) Check() []sweep.Fault {
	var faults []sweep.Fault
	add := func(field, want, format string, got ...any) {
		faults = append(faults, sweep.Fault{Field: field, Want: want, Got: fmt.Sprintf(format, got...)})
	}
	if !slices.Contains(Kinds(), c.Network) {
		add("fixture_network", fmt.Sprintf("one of %v", Kinds()), "%q", c.Network)
	}
	for _, v := range []struct {
		field string
		value float64
		limit float64
	}{
		{"source_level.standard_uncertainty_db", c.SourceLevelUncertaintyDB, 40},
		{"drift.gain_db", c.DriftGainDB, 40},
		{"drift.phase_deg", c.DriftPhaseDeg, 180},
		{"contact.standard_uncertainty_ohm", c.ContactUncertaintyOhm, 1e6},
		{"reference_clock.standard_uncertainty_ppm", c.ReferenceClockUncertaintyPPM, 1e5},
	} {
		if !(v.value >= 0 && v.value <= v.limit) {
			add(v.field, fmt.Sprintf("0 to %g", v.limit), "%g", v.value)
		}
	}
	if z := c.ReferenceImpedanceOhm; z != 0 && !(z >= 1e-3 && z <= 1e6) {
		add("reference_impedance_ohm", "1e-3 to 1e6, or nothing for 50", "%g", z)
	}
	if z := c.NominalTerminationOhm; z != 0 && !(z >= 1e-3 && z <= 1e9) {
		add("nominal_termination_ohm", "1e-3 to 1e9, or nothing for that of the network", "%g", z)
	}
	if !(math.Abs(c.SourceLevelOffsetDB) <= 100) {
		add("source_level.offset_db", "-100 to 100", "%g", c.SourceLevelOffsetDB)
	}
	if !(math.Abs(c.ReferenceClockOffsetPPM) <= 1e5) {
		add("reference_clock.offset_ppm", "-1e5 to 1e5", "%g", c.ReferenceClockOffsetPPM)
	}
	if n := c.ReceiverNoise; n != nil {
		if !(n.RMS >= 0 && n.RMS <= 1e12) || n.Averaging < 0 {
			add("receiver_noise", "an rms of 0 to 1e12 and an averaging time of at least 0", "rms %g, averaging %v", n.RMS, n.Averaging)
		}
		if p := n.SourcePowerDBm; p != nil && !(*p >= -200 && *p <= 60) {
			add("receiver_noise.source_power_dbm", "-200 to 60", "%g", *p)
		}
	}
	if len(c.Standards) == 0 {
		return faults
	}
	before := len(faults)
	for i := range c.Standards {
		faults = append(faults, c.Standards[i].check(fmt.Sprintf("standards[%d]", i))...)
	}
	if len(faults) == before {
		faults = append(faults, c.checkStandards()...)
	}
	return faults
}

// check returns what is wrong with one standard by itself.
func (s *Standard) check(field string) []sweep.Fault {
	if s.File != "" {
		field += " " + s.File
	}
	var faults []sweep.Fault
	add := func(name, want, format string, got ...any) {
		faults = append(faults, sweep.Fault{Field: field + ": " + name, Want: want, Got: fmt.Sprintf(format, got...)})
	}
	if !slices.Contains(StandardKinds(), s.Kind) {
		add("kind", fmt.Sprintf("one of %v", StandardKinds()), "%q", s.Kind)
	}
	for _, v := range []struct {
		name  string
		value float64
		low   float64
	}{
		{"resistance_ohm", s.ResistanceOhm, 0},
		{"inductance_h", s.InductanceHenry, -1},
		{"capacitance_f", s.CapacitanceFarad, -1}, // a reference plane beyond the contacts makes a small negative one
		{"resistance uncertainty", s.ResistanceUncertaintyOhm, 0},
		{"inductance uncertainty", s.InductanceUncertaintyHenry, 0},
		{"capacitance uncertainty", s.CapacitanceUncertaintyFarad, 0},
	} {
		if !(v.value >= v.low && v.value <= 1e12) {
			add(v.name, fmt.Sprintf("%g to 1e12", v.low), "%g", v.value)
		}
	}
	if (s.Kind == Load || s.Kind == Check) && s.ResistanceOhm == 0 {
		add("resistance_ohm", "above 0", "0")
	}
	n := len(s.FrequencyHz)
	if n < 2 || n > sweep.MaxPoints {
		add("points", fmt.Sprintf("2 to %d", sweep.MaxPoints), "%d", n)
	}
	if len(s.Re) != n || (len(s.Im) != n && len(s.Im) != 0) {
		add("samples", fmt.Sprintf("one sample for each of %d frequencies", n), "%d real and %d imaginary parts", len(s.Re), len(s.Im))
		return faults
	}
	for i, f := range s.FrequencyHz {
		if !(f >= 1 && f <= 1e12) || (i > 0 && f <= s.FrequencyHz[i-1]) {
			add("frequency_hz", "ascending finite values from 1 to 1e12", "%g at point %d", f, i)
			break
		}
	}
	for i := range s.Re {
		im := 0.0
		if len(s.Im) > 0 {
			im = s.Im[i]
		}
		if !(math.Abs(s.Re[i]) <= 1e12 && math.Abs(im) <= 1e12) || (len(s.Im) == 0 && s.Re[i] < 0) {
			add("samples", "finite values of modulus up to 1e12, magnitudes of at least 0", "(%g, %g) at point %d", s.Re[i], im, i)
			break
		}
	}
	return faults
}

// checkStandards returns what is wrong with the standards taken together. Whether their bands meet is not asked here: that is a mismatch.
func (c *Calibration) checkStandards() []sweep.Fault {
	magnitudes, shorts := 0, 0
	for i := range c.Standards {
		if c.Standards[i].magnitudeOnly() {
			magnitudes++
		}
		if c.Standards[i].Kind == Short {
			shorts++
		}
	}
	switch {
	case magnitudes == len(c.Standards):
		if !c.Network.Gives(sweep.S21Magnitude) || c.Network == Unknown {
			return []sweep.Fault{{Field: "standards", Want: fmt.Sprintf("complex samples in a %s network", c.Network), Got: "magnitudes"}}
		}
		if shorts == 0 {
			return []sweep.Fault{{Field: "standards", Want: "a short, to which magnitudes are referred", Got: "none"}}
		}
		return nil
	case magnitudes > 0:
		return []sweep.Fault{{Field: "standards", Want: "all complex or all magnitudes", Got: fmt.Sprintf("%d of %d without phase", magnitudes, len(c.Standards))}}
	}
	var all []*Standard
	for i := range c.Standards {
		if c.Standards[i].Kind != Check {
			all = append(all, &c.Standards[i])
		}
	}
	if n := distinct(all, c.scaleOhm(), -1); n < needed {
		return []sweep.Fault{{Field: "standards", Want: fmt.Sprintf("%d or more of distinct values, check standards not counted", needed), Got: fmt.Sprintf("%d", n)}}
	}
	return nil
}

// scaleOhm is the impedance that divides "near an open" from "near a short": the nominal termination, else what the loads suggest.
func (c *Calibration) scaleOhm() float64 {
	if zt := c.terminationOhm(); zt > 0 {
		return zt
	}
	product, loads := 1.0, 0
	for i := range c.Standards {
		if s := &c.Standards[i]; s.Kind == Load {
			product, loads = product*s.ResistanceOhm, loads+1
		}
	}
	if loads == 0 {
		return 50
	}
	return math.Pow(product, 1/float64(loads))
}

// distinct counts the standards that lie apart from each other at a frequency; at a negative one each is taken in the middle of its own band.
func distinct(standards []*Standard, scaleOhm, frequencyHz float64) int {
	var positions []complex128
	for _, s := range standards {
		f := frequencyHz
		if f < 0 {
			f = (s.FrequencyHz[0] + s.FrequencyHz[len(s.FrequencyHz)-1]) / 2
		}
		p := s.position(f, scaleOhm)
		if !slices.ContainsFunc(positions, func(o complex128) bool { return abs(p-o) < leastSeparation }) {
			positions = append(positions, p)
		}
	}
	return len(positions)
}
