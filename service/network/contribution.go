package network

import (
	"math"
	"math/cmplx"
	"slices"

	"example.com/admit/service/sweep"
)

// The names of the systematic influences on the terms.
const (
	// InfluenceStandards: a stated value of a standard (group: "load resistance") is off by its standard uncertainty.
	InfluenceStandards = "calibration_standards"
	// InfluenceNoise: the reading of a standard (group: "2 short", its place in the calibration, from 1, and kind, real or imaginary part) is
	// off by what noise its smoothed trace keeps. Common to all sweeps under one calibration.
	InfluenceNoise = "calibration_noise"
	// InfluenceGainDrift, InfluencePhaseDrift: all samples have grown or turned since the calibration.
	InfluenceGainDrift  = "gain_drift"
	InfluencePhaseDrift = "phase_drift"
	// InfluenceNominalGain, InfluenceNominalPhase, InfluenceNominalTermination: the network is not quite the nominal one.
	InfluenceNominalGain        = "nominal_gain"
	InfluenceNominalPhase       = "nominal_phase"
	InfluenceNominalTermination = "nominal_termination"
	// InfluenceMismatch: reflections that magnitudes cannot correct make the termination complex (groups "resistive", "reactive") or, as far
	// as an open shows it, leak past the unit ("leakage, real part", ...).
	InfluenceMismatch = "mismatch"
)

// Standard uncertainties of a nominal network: common practice, no source. The gain is that of a through connection that was never read;
// one degree is the reference plane of a fixture a few millimetres long; a reflection of 0.03 is a port with 30 dB of return loss.
const (
	DefaultNominalGainDB      = 0.1
	DefaultNominalPhaseDeg    = 1
	DefaultNominalTermination = 0.005 // relative
	DefaultPortReflection     = 0.03
)

// drift holds the standard uncertainties of gain and phase since the calibration.
type drift struct{ gainDB, phaseDeg float64 }

// mismatchOf returns by how much, relative, reflections of the two ports make the real and the imaginary part of the termination uncertain.
// A reflection G of a port is seen through one half there and back, |Ts| in all, and changes the half's impedance by 2 G |Ts|; of two
// independent sides with random phase G |Ts| is left in each part: 0.1 % in the pi-network, 3 % in a series-through fixture.
func mismatchOf(k Kind, referenceImpedanceOhm, terminationOhm float64) float64 {
	circuit, ok := k.Circuit(referenceImpedanceOhm, terminationOhm)
	if !ok {
		return 0
	}
	return DefaultPortReflection * circuit.ShortTransmission()
}

// Contributions returns the systematic influences on the terms at the frequencies of a sweep, each as the terms off by one standard
// uncertainty. Influences are independent of each other. dst is filled from its start and its buffers are reused: nothing is allocated
// from the second call of a length on. Errors are those of Terms.
//
// Gain and phase act on the sample, T (1 + dg) and T exp(j dphi), which is A and B off by that factor. With standards they are the drift that
// the calibration states; a nominal network has the default gain and phase beside that, its termination off by 0.5 %, and, for
// magnitudes, the mismatch of its ports; standards read as magnitudes leave the latter two. Admittances and impedances have a gain and a phase only.
//
// Noise of the calibration: see smooth.go for what is smoothed. A smoothed standard is off by the noise that its polynomial keeps in the
// middle of the sweep; a standard that was not, by the noise of one reading over the root of its readings inside the sweep.
func (s *Solved) Contributions(dst []Contribution, frequencyHz []float64, q sweep.Quantity) ([]Contribution, error) {
	kept := dst[:cap(dst)]
	dst = dst[:0]
	next := func(name, group string) *Contribution {
		if len(dst) < len(kept) {
			dst = kept[:len(dst)+1]
		} else {
			dst = append(dst, Contribution{})
		}
		c := &dst[len(dst)-1]
		c.Name, c.Group = name, group
		return c
	}
	// The first one holds the plain terms until all others are made from them.
	if err := s.Terms(&next("", "").Terms, frequencyHz, q); err != nil {
		return dst[:0], err
	}
	stated := q == sweep.Admittance || q == sweep.Impedance
	gainDB, phaseDeg, gainName, phaseName := s.drift.gainDB, s.drift.phaseDeg, InfluenceGainDrift, InfluencePhaseDrift
	if !s.Calibrated() {
		gainDB, phaseDeg = math.Hypot(gainDB, DefaultNominalGainDB), math.Hypot(phaseDeg, DefaultNominalPhaseDeg)
		gainName, phaseName = InfluenceNominalGain, InfluenceNominalPhase
	}
	if q.Complex() {
		c := next(phaseName, "")
		c.scaleFrom(&dst[0].Terms, cmplx.Rect(1, phaseDeg*math.Pi/180), 1)
	}
	if !stated && (!s.Calibrated() || s.magnitudeOnly) {
		c := next(InfluenceNominalTermination, "")
		c.scaleFrom(&dst[0].Terms, 1, 1+DefaultNominalTermination)
	}
	if !q.Complex() && (!s.Calibrated() || s.magnitudeOnly) {
		u := mismatchOf(s.network, s.referenceImpedanceOhm, s.terminationOhm)
		c := next(InfluenceMismatch, "resistive")
		c.scaleFrom(&dst[0].Terms, 1, complex(1+u, 0))
		c = next(InfluenceMismatch, "reactive")
		c.scaleFrom(&dst[0].Terms, 1, complex(1, u))
	}
	if !stated && s.Calibrated() {
		first := len(dst)
		for k := range s.influences {
			if s.touched(k, frequencyHz) {
				c := next(s.influences[k].name, s.influences[k].group)
				c.influence = k
			}
		}
		for ; first < len(dst); first += batch {
			s.change(dst[first:min(first+batch, len(dst))], &dst[0].Terms)
		}
	}
	dst[0].Name = gainName
	dst[0].scaleFrom(&dst[0].Terms, complex(math.Pow(10, gainDB/20), 0), 1)
	return dst, nil
}

// scaleFrom sets the terms to those of base with the sample times gain and the termination times a factor, the sample of a short unchanged by
// the latter. base may be the terms themselves.
func (c *Contribution) scaleFrom(base *Terms, gain, termination complex128) {
	t := &c.Terms
	if t != base {
		t.setFrequencies(base.FrequencyHz)
	}
	t.D = base.D
	for i := range t.A {
		t.A[i], t.B[i], t.C[i] = base.A[i]*gain, base.B[i]*gain*termination, base.C[i]*termination
	}
}

// touched reports whether an influence acts at one of the frequencies.
func (s *Solved) touched(k int, frequencyHz []float64) bool {
	which := 0
	for _, f := range frequencyHz {
		if _, i := s.locate(f, which); i >= 0 {
			which = i
			if s.segments[i].changes[k] != nil {
				return true
			}
		}
		if len(s.segments) == 1 {
			return false
		}
	}
	return false
}

// batch is how many influences are worked out in one pass over a sweep.
const batch = 32

// change sets the terms of each contribution to those of base moved by its influence; at most batch of them.
func (s *Solved) change(all []Contribution, base *Terms) {
	for m := range all {
		all[m].Terms.setFrequencies(base.FrequencyHz)
		all[m].Terms.D = 1
	}
	span := Band{slices.Min(base.FrequencyHz), slices.Max(base.FrequencyHz)}
	var scales [batch]complex128 // in the segment last met
	var changes [batch][]three
	which, cell, met := 0, 0, -1
	for i, f := range base.FrequencyHz {
		f, which = s.locate(f, which)
		g := &s.segments[which]
		if met != which {
			met = which
			for m := range all {
				k := all[m].influence
				changes[m], scales[m] = g.changes[k], g.scale(k, &s.influences[k], span)
			}
		}
		cell = g.coarse.cell(f, cell)
		share := (f - g.coarse.x[cell]) / (g.coarse.x[cell+1] - g.coarse.x[cell])
		low, high := complex(1-share, 0), complex(share, 0)
		forth := turn(g.delaySecond, f, g.band.LowHz)
		for m := range all {
			t := &all[m].Terms
			a, b, c := base.A[i], base.B[i], base.C[i]
			if changes[m] != nil {
				from, to := &changes[m][cell], &changes[m][cell+1]
				turned := forth * scales[m]
				a += turned * (low*from.a + high*to.a)
				b += turned * (low*from.b + high*to.b)
				c += scales[m] * (low*from.c + high*to.c)
			}
			t.A[i], t.B[i], t.C[i] = a, b, c
		}
	}
}

// scale returns what the kept change of an influence is to be multiplied with for a sweep over the span.
func (g *segment) scale(k int, n *influence, span Band) complex128 {
	if g.noise[k] == nil {
		return 1
	}
	sigma := math.Sqrt(g.noise[k].varianceOver(span) / 2) // of one of the two parts
	if n.turned {
		return complex(0, sigma)
	}
	return complex(sigma, 0)
}
