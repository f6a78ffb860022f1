package bound

import (
	"errors"
	"math"

	"example.com/admit/service/crystal"
)

// Quantity indexes what the bound is stated for.
type Quantity int

// The quantities, in SI units.
const (
	ResonanceHz Quantity = iota // fs
	ResistanceOhm
	InductanceHenry
	CapacitanceFarad // C1
	ShuntFarad       // C0
	QualityFactor
	Quantities // how many there are
)

// Extra names a parameter that is unknown besides fs, R1, L1 and C0.
type Extra int

// The extras: dielectric loss, a phase of all samples, a factor on all times.
const (
	Conductance Extra = iota
	Phase
	Stretch
)

// Bound is the Cramer-Rao bound of one sweep.
type Bound struct {
	Deviation [Quantities]float64 // the least standard deviations

	rows      [Quantities][]float64 // from scores to errors, see Errors
	clean     []complex128          // samples without noise
	noiseRMS  float64
	magnitude bool
}

// ErrUndetermined is returned where the sweep leaves a parameter open: the Fisher matrix is singular to working precision.
var ErrUndetermined = errors.New("bound: the sweep does not determine every parameter")

// differenceStep is the step of the differences, in parameters scaled to be of order one. The error of a difference of the sixth
// order is below 1e-12 with it, and so is rounding.
const differenceStep = 1e-3

// Of returns the bound for the main mode and C0 of a unit, all of fs, R1, L1 and C0 unknown and the extras besides.
//
// For complex samples of variance s^2 a part (s^2 = NoiseRMS^2/2) the Fisher matrix is J'J/s^2, J being the derivatives of real and
// imaginary parts; for magnitudes J holds the derivatives of |T|, and each sample counts with the information of a Rice
// distribution about its level.
func Of(unit crystal.Unit, s Sweep, extras ...Extra) (*Bound, error) {
	m := newModel(unit, s)
	n := len(s.FrequencyHz)
	moves := scaled(unit, s, extras)
	b := &Bound{clean: make([]complex128, n), noiseRMS: s.NoiseRMS, magnitude: s.MagnitudeOnly}
	at := nominal(unit)
	m.samples(at, b.clean)
	deviation := s.NoiseRMS / math.Sqrt2
	columns := make([][]float64, len(moves))
	for k, move := range moves {
		columns[k] = b.column(difference(m, at, move))
	}
	information := make([]float64, 2*n)
	for i := range n {
		information[2*i], information[2*i+1] = 1, 1
		if s.MagnitudeOnly {
			v := b.clean[i]
			information[2*i], information[2*i+1] = riceInformation(math.Hypot(real(v), imag(v))/deviation), 0
		}
	}
	p := len(moves)
	fisher := make([]float64, p*p)
	for k := range p {
		for l := range p {
			var sum float64
			for i, w := range information {
				sum += w * columns[k][i] * columns[l][i]
			}
			fisher[k*p+l] = sum / (deviation * deviation)
		}
	}
	inverse, ok := inverted(fisher, p)
	if !ok {
		return nil, ErrUndetermined
	}
	b.state(unit, s, inverse, columns)
	return b, nil
}

// nominal is the point of the unit itself.
func nominal(u crystal.Unit) point {
	return point{
		resistance: u.Modes[0].ResistanceOhm, inductance: u.Modes[0].InductanceHenry,
		shunt: u.ShuntCapacitanceFarad, conductance: u.ShuntConductanceSiemens,
	}
}

// loadedBandwidthHz is the unit of frequency of the scaled parameters.
func loadedBandwidthHz(u crystal.Unit, s Sweep) float64 {
	return u.Modes[0].LoadedBandwidthHz(real(s.Port(u.Modes[0].ResonanceHz).Source))
}

// scaled returns what a step of each parameter does to a point: fs in loaded bandwidths, ln R1, ln L1, C0 relative, then the extras.
func scaled(u crystal.Unit, s Sweep, extras []Extra) []func(*point, float64) {
	bandwidth := loadedBandwidthHz(u, s)
	fs, c0 := u.Modes[0].ResonanceHz, u.ShuntCapacitanceFarad
	moves := []func(*point, float64){
		func(p *point, h float64) { p.offsetHz += h * bandwidth },
		func(p *point, h float64) { p.resistance *= math.Exp(h) },
		func(p *point, h float64) { p.inductance *= math.Exp(h) },
		func(p *point, h float64) { p.shunt += h * c0 },
	}
	for _, e := range extras {
		switch e {
		case Conductance:
			moves = append(moves, func(p *point, h float64) { p.conductance += h * 2 * math.Pi * fs * c0 })
		case Phase:
			moves = append(moves, func(p *point, h float64) { p.phase += h })
		case Stretch:
			moves = append(moves, func(p *point, h float64) { p.stretch += h })
		}
	}
	return moves
}

// difference returns the derivative of every sample: central differences of the sixth order,
//
//	f' = (45 (f1 - f-1) - 9 (f2 - f-2) + (f3 - f-3))/(60 h)
func difference(m *model, at point, move func(*point, float64)) []complex128 {
	n := len(m.sweep.FrequencyHz)
	sum, sample := make([]complex128, n), make([]complex128, n)
	for _, term := range [...]struct{ steps, factor float64 }{{1, 45}, {-1, -45}, {2, -9}, {-2, 9}, {3, 1}, {-3, -1}} {
		p := at
		move(&p, term.steps*differenceStep)
		m.samples(p, sample)
		for i := range sum {
			sum[i] += complex(term.factor/(60*differenceStep), 0) * sample[i]
		}
	}
	return sum
}

// column lays derivatives out as real numbers, two a sample: real and imaginary part, or that of the modulus and 0.
func (b *Bound) column(d []complex128) []float64 {
	c := make([]float64, 2*len(d))
	for i, v := range d {
		c[2*i], c[2*i+1] = real(v), imag(v)
		if b.magnitude {
			t := b.clean[i]
			c[2*i], c[2*i+1] = (real(v)*real(t)+imag(v)*imag(t))/math.Hypot(real(t), imag(t)), 0
		}
	}
	return c
}

// state turns the covariance of the scaled parameters into deviations of the quantities, and keeps what Errors needs.
func (b *Bound) state(u crystal.Unit, s Sweep, inverse []float64, columns [][]float64) {
	main := u.Modes[0]
	bandwidth := loadedBandwidthHz(u, s)
	relative := bandwidth / main.ResonanceHz
	c1, q := main.CapacitanceFarad(), main.QualityFactor()
	gradients := [Quantities][4]float64{
		ResonanceHz:      {bandwidth},
		ResistanceOhm:    {0, main.ResistanceOhm},
		InductanceHenry:  {0, 0, main.InductanceHenry},
		CapacitanceFarad: {-2 * relative * c1, 0, -c1}, // C1 = 1/((2 pi fs)^2 L1)
		ShuntFarad:       {0, 0, 0, u.ShuntCapacitanceFarad},
		QualityFactor:    {relative * q, -q, q}, // Q = 2 pi fs L1/R1
	}
	p := len(columns)
	for quantity, gradient := range gradients {
		direction := make([]float64, p) // F^-1 g
		var variance float64
		for k := range p {
			for l, g := range gradient {
				direction[k] += inverse[k*p+l] * g
			}
		}
		for l, g := range gradient {
			variance += g * direction[l]
		}
		b.Deviation[quantity] = math.Sqrt(variance)
		row := make([]float64, len(columns[0]))
		for k, c := range columns {
			for i, v := range c {
				row[i] += direction[k] * v
			}
		}
		b.rows[quantity] = row
	}
}

// Clean returns the samples without noise. The slice belongs to the bound.
func (b *Bound) Clean() []complex128 { return b.clean }

// Errors writes what an efficient estimator would be off by, to first order, for the noise of the samples: F^-1 times the gradient of the
// log-likelihood at the true parameters. Over the noise the mean is 0 and the standard deviation the bound, exactly, for complex samples and for
// magnitudes alike (there the noise is that before the modulus was taken).
func (b *Bound) Errors(noise []complex128) (e [Quantities]float64) {
	s := b.noiseRMS / math.Sqrt2
	for i, n := range noise {
		re, im := real(n), imag(n)
		if b.magnitude {
			t := b.clean[i]
			u := math.Hypot(real(t), imag(t)) / s
			v := math.Hypot(real(t+n), imag(t+n)) / s
			re, im = s*(v*besselRatio(u*v)-u), 0
		}
		for q := range e {
			e[q] += b.rows[q][2*i]*re + b.rows[q][2*i+1]*im
		}
	}
	for q := range e {
		e[q] /= s * s
	}
	return e
}

// Shift returns by how much the quantities move, to first order, when the samples are off by something small: what a model that neglects
// it would be wrong by. For complex samples only.
func (b *Bound) Shift(difference []complex128) [Quantities]float64 { return b.Errors(difference) }
