package survey

import (
	"math"

	"example.com/admit/service/leastsquares"
	"example.com/admit/service/resonance"
)

// Surveyor searches sweeps for modes. It owns every buffer, so that one Surveyor serves a stream of sweeps; the zero value is ready for use. A
// Surveyor serves one goroutine at a time. Once its buffers have grown only an answer other than Found allocates, for its words.
type Surveyor struct {
	samples samples
	model   model
	scanner scanner
	local   local
	joint   leastsquares.Workspace
	small   leastsquares.Workspace
	request *Request

	now, next, other solution
	residual         []float64 // of now, in pairs
	scratch          []float64
	shift            []float64
	batch            [mostBatch]lobe
	from             [mostBatch]peak // where the search found them
	refused          [mostRefused]peak
	refusals         int

	narrowest, widest float64 // half-widths of the bank
	variance          float64 // of a complex raw sample
	together          float64 // of hangs, 0: not worked out
	threshold         float64
	tests, rounds     int
	wild, iterations  int
	more              bool

	mapping   mapping
	circuit   []complex128
	place     []int   // of the modes of the result among those of the fit
	chief     int     // the main mode or overtone among those of the fit, or -1
	reference float64 // R1 that suppressions are told against; 0: none
	hides     []lobe  // the modes found, as the fixture shows them

	ringers   [ringingWidths]float64
	tabulated float64   // the step that ringers are for
	views     []float64 // what a further mode meets at each point: see view

	defaultSpans [2]Span
	fits         int // joint fits so far: the workspace holds the last
	asked        int // the fit at whose solution the model was asked last, 0: none
}

// solution is one set of fitted parameters with the model that they belong to.
type solution struct {
	params                        []float64
	modes                         int
	conductance, phase, stretched bool
	memory                        bool
	sum                           float64 // of squares
	status                        leastsquares.Status
	offset                        float64 // from the minimum, in standard deviations
	fit                           int     // which of the Surveyor's fits this is
	gain                          [MostModes]float64
	compared                      [MostModes]bool // the gain is that over a fit without the mode, and no mode has been taken out since
}

func (a *solution) copyFrom(b *solution) {
	params := append(a.params[:0], b.params...)
	*a = *b
	a.params = params
}

// The solver's tolerances: of fits on the way, and of the last one. In standard deviations.
const (
	looseTolerance = 0.01
	tightTolerance = 0.01
	looseLimit     = 30
	tightLimit     = 60

	// roundingOfSamples, relative to the largest sample, is the least residual that means anything.
	roundingOfSamples = 4e-15

	// leastNoise, relative to the largest sample, is what counts as noise where there is less: no receiver has 140 dB of dynamic range, and
	// no model of a fixture is better.
	leastNoise = 1e-7
)

// Survey searches one sweep. out is overwritten; its slices are reused.
func (v *Surveyor) Survey(req *Request, out *Result) {
	*out = Result{
		Modes: out.Modes[:0], Value: out.Value[:0], Statistical: out.Statistical[:0], Systematic: out.Systematic,
		Observability: out.Observability[:0], ScaleUnknown: req.ScaleUnknown,
	}
	v.request = req
	if !v.admissible(out) {
		out.Systematic = out.Systematic[:0]
		return
	}
	v.begin()
	v.detect()
	v.finish()
	v.fill(out)
	v.observe(out)
	v.judge(out)
}

// begin prepares samples and model, with the background and, where it is known, the main mode as a start.
func (v *Surveyor) begin() {
	s, m := &v.samples, &v.model
	s.prepare(v.request)
	m.prepare(s)
	v.local.m = m
	v.fits++ // what the workspace holds belongs to another sweep
	v.iterations, v.rounds, v.tests, v.wild, v.refusals, v.more = 0, 0, 0, 0, 0, false
	v.threshold, v.variance = 0, 0
	v.keep(&v.now)
	v.now.params = v.background(v.now.params[:0])
	v.startMain()
	v.keep(&v.now)
	if v.remembers() && v.short() {
		m.remember()
		v.keep(&v.now)
	}
	if m.modes > 0 {
		plain := &v.next
		plain.copyFrom(&v.now)
		plain.modes, plain.params = 0, plain.params[:m.column(optionals)]
		v.fit(plain, looseTolerance, looseLimit)
		// A start that does not lead to the mode is dropped; the search finds it.
		if !v.fit(&v.now, looseTolerance, looseLimit) || !(v.now.sum < plain.sum/2) {
			v.now.copyFrom(plain)
		}
	}
	if v.now.modes == 0 && s.unknown {
		v.fit(&v.now, looseTolerance, looseLimit) // the slope of the background is not known
	}
}

// background appends the start of a unit without modes: C0 from the median of all susceptances, or the median sample.
func (v *Surveyor) background(params []float64) []float64 {
	s := &v.samples
	v.scratch = grown(v.scratch, s.n)
	if s.unknown {
		var middle [2]float64
		for part := range middle {
			for i, value := range s.value {
				v.scratch[i] = real(value)
				if part == 1 {
					v.scratch[i] = imag(value)
				}
			}
			middle[part] = median(v.scratch)
		}
		return append(params, middle[0], middle[1], 0, 0)
	}
	for i, f := range s.value {
		y := f * reciprocal(1-s.source[i]*f)
		v.scratch[i] = imag(y) / s.angular[i]
	}
	return append(params, median(v.scratch))
}

// startMain puts the known main mode into the model: as a mode where the sweep holds it, as a neighbour where it does not.
func (v *Surveyor) startMain() {
	main, s := v.request.Main, &v.samples
	if main == nil || main.State != resonance.Found || main.ScaleUnknown != s.unknown {
		return
	}
	a := arm{
		main.Value[resonance.ResonanceHz] - s.referenceHz,
		math.Exp(main.Value[resonance.LogResistance]), math.Exp(main.Value[resonance.LogInductance]),
	}
	const margin = 2 // loaded half-widths
	if s.unknown {
		return // its height is not known; the search finds it
	}
	i := s.nearest(a.offsetHz)
	if c0 := main.Value[resonance.ShuntCapacitanceFarad]; c0 > 0 {
		v.now.params[0] = c0
	}
	half := (a.resistance + real(v.model.seenBy(v.model.admittanceAt(v.now.params, i, -1), i))) / (4 * math.Pi * a.inductance)
	if a.offsetHz < s.lowHz-margin*half || a.offsetHz > s.highHz+margin*half {
		v.model.neighbour = &a
		return
	}
	v.model.modes = 1
	v.now.params = append(v.now.params, a.offsetHz, math.Log(a.resistance), math.Log(a.inductance))
}

// keep notes the model's form in a solution.
func (v *Surveyor) keep(a *solution) {
	m := &v.model
	a.modes, a.conductance, a.phase, a.stretched, a.memory = m.modes, m.conductance, m.phase, m.stretched, m.memory
	clear(a.gain[:])
	clear(a.compared[:])
	a.fit = 0
}

// restore gives the model the form of a solution.
func (v *Surveyor) restore(a *solution) {
	m := &v.model
	reset := m.stretched && !a.stretched
	m.modes, m.conductance, m.phase, m.stretched, m.memory = a.modes, a.conductance, a.phase, a.stretched, a.memory
	if reset && m.memory {
		m.ring.set(m.s, 1)
	}
}

// fit fits all modes of a solution together. false if the result is no number.
func (v *Surveyor) fit(a *solution, tolerance float64, limit int) bool {
	v.restore(a)
	res := v.joint.Fit(&v.model, 2*v.samples.n, a.params, leastsquares.Options{
		ComplexPairs: true, Tolerance: tolerance, ResidualFloor: roundingOfSamples * v.samples.largest, IterationLimit: limit,
	})
	v.fits++
	a.sum, a.status, a.offset, a.fit = res.SumOfSquares, res.Status, res.Offset, v.fits
	v.asked = 0
	if res.Refused == 0 && res.Status == leastsquares.Converged {
		v.asked = a.fit // the last step taken is where the model was asked last
	}
	v.iterations += res.Iterations + res.Refused
	return res.Status != leastsquares.NotFinite && res.Status != leastsquares.Malformed
}

// hold fits the present solution again unless the workspace holds it, to the given tolerance.
func (v *Surveyor) hold(tolerance float64, limit int) bool {
	if v.now.fit == v.fits && v.now.offset <= tolerance {
		v.restore(&v.now)
		return true
	}
	return v.fit(&v.now, tolerance, limit)
}

// look evaluates the present solution: its residual, and the weights that belong to it. It returns the number of points counted.
func (v *Surveyor) look() {
	v.restore(&v.now)
	v.residual = grown(v.residual, 2*v.samples.n)
	if v.now.fit == v.fits && v.now.fit == v.asked {
		copy(v.residual, v.joint.Residual()) // and weights and admittances are still in the model
	} else {
		v.model.Evaluate(v.now.params, v.residual, nil)
		v.asked = v.now.fit
	}
	v.variance = v.noise(v.residual, len(v.now.params))
	v.together = 0
	v.now.sum = 0
	for _, r := range v.residual {
		v.now.sum += r * r
	}
}

// hangs returns how many residuals of the present solution carry together what one of white noise would; it follows look.
func (v *Surveyor) hangs() float64 {
	if v.together == 0 {
		v.together = correlations(v.residual)
	}
	return v.together
}

// noise returns the variance of a complex raw sample: the instrument's where it is known and what is left does not say that there is more;
// else from the median of what is left, which modes not yet found hardly move.
func (v *Surveyor) noise(residual []float64, parameters int) float64 {
	s := &v.samples
	v.scratch = grown(v.scratch, s.n)
	kept := v.scratch[:0]
	for i := range s.n {
		if s.scale[i] != 0 {
			kept = append(kept, residual[2*i]*residual[2*i]+residual[2*i+1]*residual[2*i+1])
		}
	}
	freedom := math.Max(float64(2*len(kept)-parameters), 1)
	typical := median(kept) / math.Ln2 * float64(2*len(kept)) / freedom
	floor := leastNoise * s.largest
	typical = math.Max(typical, floor*floor)
	const more = 1.5
	if known := v.request.NoiseRMS * v.request.NoiseRMS; known > 0 && typical < more*known {
		return math.Max(known, floor*floor)
	}
	return typical
}

// gainOf returns by how much twice the log-likelihood gains when a sum of squares falls.
func (v *Surveyor) gainOf(fall float64) float64 { return 2 * fall / v.variance }

// mainWidths returns the loaded and the motional width of the strongest mode, 0 while there is none.
func (v *Surveyor) mainWidths() (loaded, motional float64) {
	k := v.strongest()
	m := &v.model
	if k < 0 {
		if a := m.neighbour; a != nil {
			width := a.resistance / (2 * math.Pi * a.inductance)
			return width, width
		}
		return 0, 0
	}
	loaded = 2 * m.lobeOf(v.now.params, k).halfHz
	if m.s.unknown {
		return loaded, loaded
	}
	a := m.armOf(v.now.params, k)
	return loaded, a.resistance / (2 * math.Pi * a.inductance)
}

// strongest returns the mode of the highest response, or -1.
func (v *Surveyor) strongest() int {
	best, most := -1, 0.0
	for k := range v.now.modes {
		l := v.model.lobeOf(v.now.params, k)
		r := v.visible(l)
		if v.samples.impedance {
			r = length(l.height) // the raw sample is largest at an antiresonance
		}
		if r > most {
			best, most = k, r
		}
	}
	return best
}

// visible returns the height in raw samples that the sweep shows of a lobe: of one beyond an edge its tail there.
func (v *Surveyor) visible(l lobe) float64 {
	s := &v.samples
	beyond := math.Max(0, math.Max(s.lowHz-l.centreHz, l.centreHz-s.highHz)) / l.halfHz
	return l.response() / math.Sqrt(1+beyond*beyond)
}

// median returns the median of values, which it reorders: quickselect with the middle of three as pivot.
func median(values []float64) float64 {
	if len(values) == 0 {
		return 0
	}
	k := len(values) / 2
	low, high := 0, len(values)-1
	for low < high {
		middle := low + (high-low)/2
		if values[middle] < values[low] {
			values[middle], values[low] = values[low], values[middle]
		}
		if values[high] < values[low] {
			values[high], values[low] = values[low], values[high]
		}
		if values[high] < values[middle] {
			values[high], values[middle] = values[middle], values[high]
		}
		pivot := values[middle]
		i, j := low, high
		for i <= j {
			for values[i] < pivot {
				i++
			}
			for values[j] > pivot {
				j--
			}
			if i <= j {
				values[i], values[j] = values[j], values[i]
				i++
				j--
			}
		}
		switch {
		case k <= j:
			high = j
		case k >= i:
			low = i
		default:
			return values[k]
		}
	}
	return values[k]
}
