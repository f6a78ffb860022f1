package resonance

import (
	"math"

	"example.com/admit/service/crystal"
	"example.com/admit/service/uncertainty"
)

// Conditions say which quantities that depend on more than the unit are wanted. A zero leaves its quantities undefined.
type Conditions struct {
	NominalHz                  float64 // reference of the frequency deviations
	LoadCapacitanceFarad       float64
	LoadConnection             crystal.LoadConnection
	PullFromFarad, PullToFarad float64 // load capacitances of the pulling range, in the same connection
	NegativeResistanceOhm      float64 // of the oscillator the start margin is for; its sign does not matter
}

// Derivation names a derived quantity.
type Derivation int

// The derived quantities. Frequencies in hertz, deviations in parts per million of the nominal frequency; the pulling sensitivity is
// dD/dCL in 1/F (1e-6 of it is in ppm/pF) and the pulling range the fraction (fL(from) - fL(to))/fs.
const (
	MotionalResonance       Derivation = iota // fs
	MotionalResistance                        // R1
	MotionalInductance                        // L1
	MotionalCapacitance                       // C1
	ShuntCapacitance                          // C0
	QualityFactor                             // Q
	FigureOfMerit                             // M
	Resonance                                 // fr, lower zero phase
	ResonanceResistance                       // Rr at fr
	Antiresonance                             // fa, upper zero phase
	ParallelResonance                         // fp, lossless
	LoadResonance                             // fL
	LoadResonanceResistance                   // RL at fL
	PullingSensitivity
	PullingRange
	StartMargin // |Rn|/RL, and |Rn|/Rr where no load is stated
	MotionalResonanceDeviation
	ResonanceDeviation
	LoadResonanceDeviation
	Derivations // how many there are
)

// Quantity is one derived quantity. Gradient holds its derivatives by the parameters of the estimate: with them, and the shifts of the
// estimates' contributions, the correlation of any two quantities, of one sweep or of two, can be had.
type Quantity struct {
	Defined     bool // false: a circuit condition that was not stated, or that the unit does not meet, such as zero phase at M below 2
	Value       float64
	Gradient    [Parameters]float64
	Statistical float64 // standard uncertainty from the noise of the sweep
	Systematic  float64 // and from all systematic influences together
}

// StandardUncertainty returns the standard uncertainty of everything together.
func (q *Quantity) StandardUncertainty() float64 { return math.Hypot(q.Statistical, q.Systematic) }

// Derived holds every derived quantity of one estimate.
type Derived [Derivations]Quantity

// Derive computes the derived quantities of an estimate with their uncertainties. Values are exact functions of the fitted circuit; the law of
// propagation of uncertainty (JCGM 100, 5.1 and 5.2; JCGM 102 for the matrices) is taken with derivatives of those same functions, by
// central differences over the range in which each parameter lies. With an unknown scale only fs, Q and the deviation of fs are defined,
// and they are those of the resonator as the network loads it.
func Derive(est *Estimate, c Conditions) (d Derived) {
	values := circuitValues(&est.Value, &c, est.ScaleUnknown)
	for k := range d {
		d[k].Value, d[k].Defined = values[k], !math.IsNaN(values[k])
	}
	total := est.Covariance()
	for p := ResonanceHz; p < PhaseRad; p++ {
		if !est.Fitted[p] {
			continue
		}
		h := step(est, p, math.Sqrt(total[p][p]))
		at := est.Value
		at[p] = est.Value[p] + h
		above, up := circuitValues(&at, &c, est.ScaleUnknown), at[p]
		at[p] = est.Value[p] - h
		below, down := circuitValues(&at, &c, est.ScaleUnknown), at[p]
		for k := range d {
			d[k].Gradient[p] = (above[k] - below[k]) / (up - down)
		}
	}
	for k := range d {
		q := &d[k]
		for _, g := range q.Gradient {
			// Within the uncertainty of the circuit the quantity ceases to exist.
			q.Defined = q.Defined && !math.IsNaN(g)
		}
		if !q.Defined {
			*q = Quantity{}
			continue
		}
		q.Statistical = math.Sqrt(variance(&q.Gradient, &est.Statistical))
		var systematic float64
		for i := range est.Systematic {
			shift := est.Systematic[i].Along(&q.Gradient)
			systematic += shift * shift
		}
		q.Systematic = math.Sqrt(systematic)
	}
	return d
}

// Along returns by how much a quantity of that gradient moves when the influence is off by one standard uncertainty.
func (c *Contribution) Along(gradient *[Parameters]float64) float64 {
	var sum float64
	for p, g := range gradient {
		sum += g * c.Shift[p]
	}
	return sum
}

// Share is the part of one influence in a standard uncertainty.
type Share struct {
	Name                string
	StandardUncertainty float64
}

// NoiseInfluence is the name of the statistical part in a budget.
const NoiseInfluence = "noise"

// Budget appends to dst what the standard uncertainty of a derived quantity of this estimate is made of: the noise of the sweep, then every
// systematic influence by name, its groups together. The squares add up.
func (e *Estimate) Budget(dst []Share, q *Quantity) []Share {
	first := len(dst)
	dst = append(dst, Share{NoiseInfluence, q.Statistical})
	for i := range e.Systematic {
		c := &e.Systematic[i]
		shift := c.Along(&q.Gradient)
		at := first + 1
		for at < len(dst) && dst[at].Name != c.Name {
			at++
		}
		if at == len(dst) {
			dst = append(dst, Share{Name: c.Name})
		}
		dst[at].StandardUncertainty = math.Hypot(dst[at].StandardUncertainty, shift)
	}
	return dst
}

func variance(gradient *[Parameters]float64, m *Matrix) float64 {
	var flat [int(Parameters) * int(Parameters)]float64
	for i := range m {
		copy(flat[i*int(Parameters):], m[i][:])
	}
	return uncertainty.Variance(gradient[:], flat[:])
}

// step returns how far a parameter is moved for its derivatives: by its standard uncertainty, so that the slope over the range in which it
// lies is taken (JCGM 100, 5.1.3 note 2), but by no more than a hundredth of what the circuit changes with, and no less than
// a millionth, where rounding would show.
func step(est *Estimate, p Parameter, deviation float64) float64 {
	scale := 1.0 // of a logarithm
	switch p {
	case ResonanceHz:
		scale = math.Exp(est.Value[LogResistance]-est.Value[LogInductance]) / (2 * math.Pi) // the bandwidth
	case ShuntCapacitanceFarad:
		scale = math.Max(math.Abs(est.Value[p]), 1e-15)
	case ShuntConductanceSiemens:
		scale = 2 * math.Pi * est.Value[ResonanceHz] * math.Max(math.Abs(est.Value[ShuntCapacitanceFarad]), 1e-15)
	}
	return math.Max(math.Min(deviation, 1e-2*scale), 1e-6*scale)
}

// circuitValues returns the derived quantities of a circuit; NaN where there is none.
func circuitValues(v *[Parameters]float64, c *Conditions, scaleUnknown bool) (out [Derivations]float64) {
	for k := range out {
		out[k] = math.NaN()
	}
	modes := [1]crystal.Mode{{
		ResonanceHz: v[ResonanceHz], ResistanceOhm: math.Exp(v[LogResistance]), InductanceHenry: math.Exp(v[LogInductance]),
	}}
	m := modes[0]
	deviation := func(frequencyHz float64) float64 {
		if !(c.NominalHz > 0) {
			return math.NaN()
		}
		return (frequencyHz - c.NominalHz) / c.NominalHz * 1e6
	}
	out[MotionalResonance], out[QualityFactor] = m.ResonanceHz, m.QualityFactor()
	out[MotionalResonanceDeviation] = deviation(m.ResonanceHz)
	if scaleUnknown {
		return out
	}
	u := crystal.Unit{Modes: modes[:], ShuntCapacitanceFarad: v[ShuntCapacitanceFarad], ShuntConductanceSiemens: v[ShuntConductanceSiemens]}
	out[MotionalResistance], out[MotionalInductance] = m.ResistanceOhm, m.InductanceHenry
	out[MotionalCapacitance], out[ShuntCapacitance] = m.CapacitanceFarad(), u.ShuntCapacitanceFarad
	out[FigureOfMerit] = finiteOrNaN(u.FigureOfMerit())
	out[ParallelResonance] = finiteOrNaN(u.ParallelResonanceHz())
	series := math.NaN()
	if f, r, err := u.Resonance(); err == nil {
		out[Resonance], out[ResonanceResistance], out[ResonanceDeviation] = f, r, deviation(f)
		series = r
	}
	if f, _, err := u.Antiresonance(); err == nil {
		out[Antiresonance] = f
	}
	if c.LoadCapacitanceFarad > 0 {
		series = math.NaN()
		if f, r, err := u.LoadResonance(c.LoadCapacitanceFarad, c.LoadConnection); err == nil {
			out[LoadResonance], out[LoadResonanceResistance], out[LoadResonanceDeviation] = f, r, deviation(f)
			series = r
		}
		if s, err := u.PullingSensitivity(c.LoadCapacitanceFarad, c.LoadConnection); err == nil {
			out[PullingSensitivity] = s
		}
	}
	if c.PullFromFarad > 0 && c.PullToFarad > 0 {
		connection := c.LoadConnection
		if connection == "" {
			connection = crystal.SeriesLoad
		}
		if r, err := u.PullingRange(c.PullFromFarad, c.PullToFarad, connection); err == nil {
			out[PullingRange] = r
		}
	}
	if c.NegativeResistanceOhm != 0 {
		out[StartMargin] = math.Abs(c.NegativeResistanceOhm) / series
	}
	return out
}

func finiteOrNaN(v float64) float64 {
	if math.IsInf(v, 0) {
		return math.NaN()
	}
	return v
}
