package bound

import (
	"math"
	"math/cmplx"

	"example.com/admit/service/crystal"
)

// Port is what a fixture network is to the unit at one frequency: a sample is Open + Gain I, where I is the current in ampere that a source of
// one volt behind Source (ohm) drives into the unit. Every linear network is of this form.
type Port struct{ Open, Gain, Source complex128 }

// Timing is how long a stepped source of continuous phase stays at each frequency, in seconds: a sample averages over the tail of the dwell,
// and the resonator, at rest before, has been driven at the first frequency for the lead-in when the first dwell begins.
type Timing struct{ Dwell, Averaging, LeadIn float64 }

// Sweep is what the bound needs to know of how samples come about.
type Sweep struct {
	FrequencyHz   []float64
	Port          func(frequencyHz float64) Port
	NoiseRMS      float64 // E|n|^2 = NoiseRMS^2, complex normal, white
	Timing        *Timing // nil: every sample is settled
	MagnitudeOnly bool    // a sample is |T + n|
}

// point is one set of parameters: the main mode's fs as an offset from the unit's, and so on.
type point struct {
	offsetHz, resistance, inductance, shunt, conductance float64
	phase, stretch                                       float64 // of all samples, and the logarithm of a factor on all times
}

// model is the forward model of a unit in a sweep. Modes beside the main one are known and stay as they are.
type model struct {
	unit  crystal.Unit
	sweep Sweep
	ports []Port // at the frequencies
}

func newModel(u crystal.Unit, s Sweep) *model {
	m := &model{u, s, make([]Port, len(s.FrequencyHz))}
	for i, f := range s.FrequencyHz {
		m.ports[i] = s.Port(f)
	}
	return m
}

// arm returns Z of a motional arm in ohm at a complex offset from its resonance, and dZ/df, with fs = resonance:
//
//	X = 2 pi L offset (f + fs)/f,    dZ/df = j 2 pi L (1 + (fs/f)^2)
func arm(resistance, inductance, resonance float64, offset complex128) (z, slope complex128) {
	f := complex(resonance, 0) + offset
	k := complex(0, 2*math.Pi*inductance)
	ratio := complex(resonance, 0) / f
	return complex(resistance, 0) + k*offset*(1+ratio), k * (1 + ratio*ratio)
}

// rest returns the admittance in siemens of all but the main arm, and its derivative by frequency, at a complex offset from fs.
func (m *model) rest(p point, fs float64, offset complex128) (y, slope complex128) {
	farad := complex(0, 2*math.Pi*p.shunt)
	y = complex(p.conductance, 0) + farad*(complex(fs, 0)+offset)
	slope = farad
	for _, other := range m.unit.Modes[1:] {
		z, dz := arm(other.ResistanceOhm, other.InductanceHenry, other.ResonanceHz, offset+complex(fs-other.ResonanceHz, 0))
		y += 1 / z
		slope -= dz / (z * z)
	}
	return y, slope
}

// samples writes the noise-free samples.
func (m *model) samples(p point, dst []complex128) {
	fs := m.unit.Modes[0].ResonanceHz + p.offsetHz
	turn := cmplx.Rect(1, p.phase)
	free := m.free(p)
	for i, f := range m.sweep.FrequencyHz {
		port := m.ports[i]
		offset := f - m.unit.Modes[0].ResonanceHz - p.offsetHz
		y, _ := m.rest(p, fs, complex(offset, 0))
		z, _ := arm(p.resistance, p.inductance, fs, complex(offset, 0))
		y += 1 / z
		current := y / (1 + port.Source*y)
		if free != nil {
			current += free.step(fs, f, offset)
		}
		dst[i] = turn * (port.Open + port.Gain*current)
	}
}

// free is the free oscillation of the main mode as the network loads it. A source exp(j 2 pi f t) drives the current I(f) = Y/(1 + Z Y), whose
// partial fraction at the natural frequency q is r/(f - q); the amplitude a of that part, seen from the source's phase, obeys
//
//	da/dt = 2 pi j (q - f) a + 2 pi j r
//
// and is handed over unchanged when the frequency changes and the phase does not. What a differs from its steady value adds to the current.
type free struct {
	pole, residue          complex128 // q as an offset from fs
	wait, averaging, first float64
	amplitude              complex128
	begun                  bool
}

// free finds the natural frequency by fixed-point iteration on 1 + Z Y = 0 and the residue there; nil for settled samples.
func (m *model) free(p point) *free {
	t := m.sweep.Timing
	if t == nil {
		return nil
	}
	fs := m.unit.Modes[0].ResonanceHz + p.offsetHz
	source := m.sweep.Port(fs).Source
	twiceL := complex(0, -2*math.Pi*p.inductance)
	// Z1 + seen = 0, seen being the network across the rest: X grows so steeply that each round gains as many digits as Q has.
	var q, spread, slope complex128
	for range 8 {
		y, dy := m.rest(p, fs, q)
		spread = 1 + source*y
		seen := source / spread
		_, dz := arm(p.resistance, p.inductance, fs, q)
		slope = dz - seen*seen*dy
		f := complex(fs, 0) + q
		q = (complex(p.resistance, 0) + seen) * f / (twiceL * (f + complex(fs, 0)))
	}
	stretch := math.Exp(p.stretch)
	return &free{
		pole: q, residue: 1 / (spread * spread * slope),
		wait: (t.Dwell - t.Averaging) * stretch, averaging: t.Averaging * stretch, first: t.LeadIn * stretch,
	}
}

// step stays at one frequency for a dwell and returns the mean over its tail of what the free oscillation adds to the steady current.
func (o *free) step(fs, f, offset float64) complex128 {
	steady := o.residue / (complex(offset, 0) - o.pole)
	rate := complex(0, 2*math.Pi) * (o.pole - complex(offset, 0))
	if !o.begun {
		o.begun = true
		o.amplitude = steady * (1 - cmplx.Exp(rate*complex(o.first, 0)))
	}
	away := (o.amplitude - steady) * cmplx.Exp(rate*complex(o.wait, 0))
	end := away * cmplx.Exp(rate*complex(o.averaging, 0))
	o.amplitude = steady + end
	return (end - away) / (rate * complex(o.averaging, 0))
}
