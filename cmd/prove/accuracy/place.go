package accuracy

import (
	"math/cmplx"
	"slices"

	"example.com/admit/cmd/prove/bound"
	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/network"
)

// place is a unit in the contact head of a fixture.
type place struct {
	name    string
	unit    crystal.Unit
	kind    network.Kind
	fixture simulated.Fixture // what really is between source and receiver
}

// fixtureOf returns the ideal fixture of a kind.
func fixtureOf(k network.Kind) simulated.Fixture {
	switch k {
	case network.PiNetwork:
		return simulated.PiFixture()
	case network.HighImpedance:
		return simulated.HighImpedanceFixture()
	case network.Reflection:
		return simulated.ReflectionFixture()
	}
	return simulated.SeriesThroughFixture()
}

// scenario returns the five units of the invented plant in their networks.
func scenario() []place {
	var all []place
	for _, k := range simulated.Scenario() {
		all = append(all, place{k.PartType, k.Nominal(), k.Network, fixtureOf(k.Network)})
	}
	return all
}

// unitOf returns a unit of one mode.
func unitOf(fsHz, resistanceOhm, capacitanceFarad, shuntFarad float64) crystal.Unit {
	return crystal.Unit{
		Modes:                 []crystal.Mode{crystal.ModeFromCapacitance(fsHz, resistanceOhm, capacitanceFarad)},
		ShuntCapacitanceFarad: shuntFarad,
	}
}

// resonanceHz returns fs of the unit.
func (p *place) resonanceHz() float64 { return p.unit.Modes[0].ResonanceHz }

// port returns what the fixture is to the unit, from three samples: an open, a short and 50 ohm.
func (p *place) port(frequencyHz float64) bound.Port {
	open, short := p.fixture.Sample(frequencyHz, cmplx.Inf()), p.fixture.Sample(frequencyHz, 0)
	share := (p.fixture.Sample(frequencyHz, 50) - open) / (short - open)
	source := 50 * share / (1 - share)
	return bound.Port{Open: open, Gain: (short - open) * source, Source: source}
}

// terminationOhm returns what the ideal fixture shows the unit.
func (p *place) terminationOhm() float64 { return real(p.port(p.resonanceHz()).Source) }

// loadedBandwidthHz returns the half-power width in the fixture.
func (p *place) loadedBandwidthHz() float64 {
	return p.unit.Modes[0].LoadedBandwidthHz(p.terminationOhm())
}

// timeConstantSeconds returns the loaded amplitude time constant.
func (p *place) timeConstantSeconds() float64 {
	return p.unit.Modes[0].LoadedTimeConstant(p.terminationOhm())
}

// calibration returns readings, free of noise, of an open, a short and a load of the nominal termination, over a band somewhat wider than the
// frequencies.
func (p *place) calibration(frequencyHz []float64) *network.Calibration {
	low, high := slices.Min(frequencyHz), slices.Max(frequencyHz)
	margin := 0.05 * (high - low)
	load := p.kind.NominalTerminationOhm()
	c := &network.Calibration{
		ID: "proof", Network: p.kind, ReferenceImpedanceOhm: 50, NominalTerminationOhm: load,
		DriftGainDB: network.DefaultDriftGainDB, DriftPhaseDeg: network.DefaultDriftPhaseDeg,
	}
	for _, s := range []struct {
		standard network.Standard
		inserted complex128
	}{
		{network.Standard{Kind: network.Open}, cmplx.Inf()},
		{network.Standard{Kind: network.Short}, 0},
		{network.Standard{Kind: network.Load, ResistanceOhm: load}, complex(load, 0)},
	} {
		const readings = 11
		for i := range readings {
			f := low - margin + (high-low+2*margin)*float64(i)/(readings-1)
			v := p.fixture.Sample(f, s.inserted)
			s.standard.FrequencyHz = append(s.standard.FrequencyHz, f)
			s.standard.Re, s.standard.Im = append(s.standard.Re, real(v)), append(s.standard.Im, imag(v))
		}
		c.Standards = append(c.Standards, s.standard)
	}
	return c
}

// response returns the height of the main response in raw samples: that at fs less that without the main arm.
func (p *place) response() float64 {
	f := p.resonanceHz()
	rest := p.unit
	rest.Modes = rest.Modes[1:]
	return cmplx.Abs(p.fixture.Sample(f, p.unit.Impedance(f)) - p.fixture.Sample(f, rest.Impedance(f)))
}

// grid returns n frequencies from fs + low to fs + high, in loaded bandwidths.
func (p *place) grid(low, high float64, n int) []float64 {
	b, f := p.loadedBandwidthHz(), make([]float64, n)
	for i := range f {
		f[i] = p.resonanceHz() + b*(low+(high-low)*float64(i)/float64(n-1))
	}
	return f
}
