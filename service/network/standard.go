package network

import (
	"fmt"
	"math"
)

// ratio returns the standard's admittance at a frequency as a quotient Y = v/u in siemens, so that an ideal short (u = 0) and an ideal open
// (v = 0) are plain numbers.
//
//	open   u = 1        v = j w C
//	short  u = R + jwL  v = 1
//	load   u = R + jwL  v = 1 + j w C (R + jwL)
func (s *Standard) ratio(frequencyHz float64) (u, v complex128) {
	angular := 2 * math.Pi * frequencyHz
	susceptance := complex(0, angular*s.CapacitanceFarad)
	series := complex(s.ResistanceOhm, angular*s.InductanceHenry)
	switch s.Kind {
	case Open:
		return 1, susceptance
	case Short:
		return series, 1
	}
	return series, 1 + susceptance*series
}

// impedanceOhm returns the stated impedance; infinite for an ideal open.
func (s *Standard) impedanceOhm(frequencyHz float64) complex128 {
	u, v := s.ratio(frequencyHz)
	return u / v
}

// position places the standard on the way from open (0) to short (1): Zt Y/(1 + Zt Y). Standards that lie close there do not tell the
// three terms apart, however different their ohms are.
func (s *Standard) position(frequencyHz, terminationOhm float64) complex128 {
	u, v := s.ratio(frequencyHz)
	v *= complex(terminationOhm, 0)
	return v / (u + v)
}

// magnitudeOnly reports whether the standard was read without phase.
func (s *Standard) magnitudeOnly() bool { return len(s.Im) == 0 }

// sameValue reports whether two sweeps are of one standard, perhaps in two bands.
func (s *Standard) sameValue(o *Standard) bool {
	return s.Kind == o.Kind && s.ResistanceOhm == o.ResistanceOhm && s.InductanceHenry == o.InductanceHenry &&
		s.CapacitanceFarad == o.CapacitanceFarad
}

// describe names the standard for messages: kind, resistance of a load, file.
func (s *Standard) describe() string {
	text := string(s.Kind)
	switch s.Kind {
	case Load:
		text = fmt.Sprintf("load %.6g ohm", s.ResistanceOhm)
	case Check:
		text = fmt.Sprintf("check standard %.6g ohm", s.ResistanceOhm)
	}
	if s.File != "" {
		text += " (" + s.File + ")"
	}
	return text
}

// uncertainValue is one stated value of a standard that is known within a standard uncertainty only.
type uncertainValue struct {
	name        string // "resistance", ...
	uncertainty float64
	shift       func(*Standard, float64)
}

// uncertainValues returns the values that count for the kind and have an uncertainty above 0.
func (s *Standard) uncertainValues() []uncertainValue {
	all := []uncertainValue{
		{"resistance", s.ResistanceUncertaintyOhm, func(t *Standard, d float64) { t.ResistanceOhm += d }},
		{"inductance", s.InductanceUncertaintyHenry, func(t *Standard, d float64) { t.InductanceHenry += d }},
		{"capacitance", s.CapacitanceUncertaintyFarad, func(t *Standard, d float64) { t.CapacitanceFarad += d }},
	}
	switch s.Kind {
	case Open:
		all = all[2:]
	case Short:
		all = all[:2]
	}
	kept := all[:0]
	for _, v := range all {
		if v.uncertainty > 0 {
			kept = append(kept, v)
		}
	}
	return kept
}

// shifted returns the standard with one value off by one standard uncertainty; the samples are shared.
func (v *uncertainValue) shifted(s *Standard) Standard {
	t := *s
	v.shift(&t, v.uncertainty)
	return t
}
