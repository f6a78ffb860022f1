package survey

import (
	"math"

	"example.com/admit/service/uncertainty"
)

// What a survey sees. A mode of the height a (in raw samples) and the loaded width B, in the worst place between two points of a grid of step D,
// has the energy
//
//	a^2 E,    E = (pi B/2D) tanh(pi B/2D)
//
// and raises twice the log-likelihood by lambda = 2 a^2 E/sigma^2 on the average, sigma^2 being the variance of a complex sample. The square root of
// the gain scatters about that of lambda by one, so the mode is found with the probability P when
//
//	lambda >= (sqrt(threshold) + z)^2,    z the standard normal quantile of P
//
// Beside a mode that is there less of the energy counts. What modes of the pole q, their place and width being free, can imitate of a mode of the
// pole p leaves the part |(p - q)/(p - q*)|^4 of it (the remainder beside 1/(f - q) and 1/(f - q)^2); and a mode that shorts the network takes
// the rest of the sample from the others: its height there is that in the whole circuit.
//
// Derivation of E: sum over the grid of 1/(1 + (2x/B)^2). Verified against the package's own detection by TestDetection.
const (
	// hiddenHalves is how far on either side a mode hides others about as wide as itself, in half-widths; within it observability is told apart.
	hiddenHalves = 4.0

	// widestAsked bounds the widths that are tried, in spans.
	widestAsked = 0.5

	// settledTimeConstants is the dwell, in time constants of a mode, from which its samples may be taken as settled.
	settledTimeConstants = 5.0
)

// sight is what observability is worked out from, for one span and suppression.
type sight struct {
	low, high float64 // offsets
	height    float64 // of the smallest response in the span, raw samples
	step      float64 // widest in the span
	need      float64 // lambda
}

// observe states for each span asked for what could not have been seen.
func (v *Surveyor) observe(out *Result) {
	v.tabulated = 0
	if !v.samples.unknown {
		v.view()
	}
	spans := v.request.Spans
	if len(spans) == 0 {
		s := &v.samples
		low, high := s.referenceHz+s.lowHz, s.referenceHz+s.highHz
		v.defaultSpans = [2]Span{{low, high, 20, PiNetworkTransmission}, {low, high, 40, PiNetworkTransmission}}
		spans = v.defaultSpans[:]
	}
	for _, span := range spans {
		v.observeSpan(out, span)
	}
}

func (v *Surveyor) observeSpan(out *Result, span Span) {
	s := &v.samples
	low, high := span.FromHz-s.referenceHz, span.ToHz-s.referenceHz
	state := func(from, to, width float64, settled bool, behind int) {
		out.Observability = append(out.Observability, Observability{
			FromHz: s.referenceHz + from, ToHz: s.referenceHz + to, SuppressionDB: span.SuppressionDB, Definition: span.Definition,
			NarrowestWidthHz: width, Settled: settled, Behind: behind,
		})
	}
	const slack = 1e-3 // of a step: ends of a span that are those of the sweep
	margin := slack * s.meanStepHz
	if low < s.lowHz-margin {
		state(low, math.Min(high, s.lowHz), math.Inf(1), true, -1)
	}
	if from, to := math.Max(low, s.lowHz), math.Min(high, s.highHz); from < to {
		width, settled := v.narrowestSeen(span, from, to, -1)
		state(from, to, width, settled, -1)
		for i, k := range v.place {
			l := v.hides[k]
			reach := hiddenHalves * l.halfHz
			if a, b := math.Max(from, l.centreHz-reach), math.Min(to, l.centreHz+reach); a < b {
				width, settled := v.narrowestSeen(span, a, b, k)
				state(a, b, width, settled, i)
			}
		}
	}
	if high > s.highHz+margin {
		state(math.Max(low, s.highHz), high, math.Inf(1), true, -1)
	}
}

// narrowestSeen returns the width from which on modes of a suppression are seen everywhere between two offsets; behind is a mode that stands there
// or -1, and then the surroundings of all modes are left out. settled is false where not noise but settling sets the width.
func (v *Surveyor) narrowestSeen(span Span, from, to float64, behind int) (width float64, settled bool) {
	s := &v.samples
	look := sight{low: from, high: to}
	z := v.request.DetectionProbability
	if !(z > 0 && z < 1) {
		z = DefaultDetectionProbability
	}
	root := math.Sqrt(v.threshold) + uncertainty.NormalQuantile(z)
	look.need = root * root
	look.height = v.leastHeight(span, from, to, behind)
	look.step = v.widestStep(from, to)
	if !(look.height > 0) {
		return math.Inf(1), true
	}
	energy := look.need * v.variance / (2 * look.height * look.height)
	if v.model.memory && v.tabulated != look.step {
		v.tabulate(look.step)
	}
	// At an edge of the sweep only half of a response is seen.
	least := v.widthOfEnergy(energy, &look)
	if from < s.lowHz+least || to > s.highHz-least {
		energy *= 2
		least = v.widthOfEnergy(energy, &look)
	}
	// From there upwards, until one is seen and, beside the mode that stands there, all wider ones are.
	const finer = 1.05
	enough := func(width float64) bool {
		return v.energyOfWidth(width, &look)*v.leastShare(from, to, width, behind) >= energy*(1-1e-9)
	}
	seen := math.Inf(1)
	for width := least; width < widestAsked*s.span(); width *= finer {
		if !enough(width) {
			seen = math.Inf(1)
			continue
		}
		seen = math.Min(seen, width)
		if behind < 0 {
			break
		}
	}
	if seen > least && !math.IsInf(seen, 1) {
		low := seen / finer // was not enough
		for range 10 {
			if middle := (low + seen) / 2; enough(middle) {
				seen = middle
			} else {
				low = middle
			}
		}
	}
	settled = true
	if !v.model.memory && s.dwell > 0 {
		if w := settledTimeConstants / (math.Pi * s.dwell); w > seen {
			seen, settled = w, false
		}
	}
	return seen, settled
}

// energyOfWidth is E of a mode of that width in the worst place.
func (v *Surveyor) energyOfWidth(width float64, look *sight) float64 {
	if v.model.memory {
		return v.ringingEnergy(width, look)
	}
	u := math.Pi * width / (2 * look.step)
	return u * math.Tanh(u)
}

// widthOfEnergy returns the width for which E is a given energy: of settled samples by Newton's method, else by halves of the logarithm.
func (v *Surveyor) widthOfEnergy(energy float64, look *sight) float64 {
	if math.IsInf(energy, 1) || math.IsNaN(energy) {
		return math.Inf(1)
	}
	if v.model.memory {
		low, high := 1e-4*look.step, widestAsked*v.samples.span()
		if v.energyOfWidth(high, look) < energy {
			return math.Inf(1)
		}
		for range 40 {
			middle := math.Sqrt(low * high)
			if v.energyOfWidth(middle, look) < energy {
				low = middle
			} else {
				high = middle
			}
		}
		return high
	}
	u := math.Max(energy, math.Sqrt(energy)) // either end of the function, from above
	for range 50 {
		t := math.Tanh(u)
		move := (u*t - energy) / (t + u*(1-t*t))
		u -= move
		if math.Abs(move) <= 1e-14*u {
			break
		}
	}
	return 2 * look.step * u / math.Pi
}

// leastShare returns the smallest part of a mode's energy that those found leave it, anywhere between two offsets; behind as in narrowestSeen.
func (v *Surveyor) leastShare(from, to, width float64, behind int) float64 {
	least := 1.0
	for k, l := range v.hides {
		d := 0.0
		switch {
		case k == behind:
		case behind >= 0:
			// Another mode's surroundings may overlap; each is told for its own.
			continue
		default:
			// The nearest that the span comes to the mode outside of what it hides.
			d = math.Max(hiddenHalves*l.halfHz, math.Max(from-l.centreHz, l.centreHz-to))
		}
		least *= share(lobe{centreHz: d, halfHz: width / 2}, lobe{halfHz: l.halfHz})
	}
	return least
}

// leastHeight returns the smallest height in raw samples of a mode of the span's suppression.
func (v *Surveyor) leastHeight(span Span, from, to float64, behind int) float64 {
	s := &v.samples
	if v.reference <= 0 {
		return 0
	}
	ratio := math.Pow(10, span.SuppressionDB/20)
	if s.unknown {
		return 1 / (v.reference * ratio)
	}
	z := span.Definition.terminationOhm()
	resistance := math.Max((v.reference+z)*ratio-z, 0) // stronger than any: seen as well as one without resistance
	least := math.Inf(1)
	for i, f := range s.offsetHz {
		if f < from || f > to {
			continue
		}
		height := v.views[2*i] / (resistance + v.views[2*i+1])
		if height < least && s.scale[i] != 0 && (behind >= 0 || !v.hidden(f)) {
			least = height
		}
	}
	if math.IsInf(least, 1) { // no point in the span that is not hidden: the nearest one tells
		i := s.nearest((from + to) / 2)
		least = v.views[2*i] / (resistance + v.views[2*i+1])
	}
	return least
}

// view works out at each point how much of the raw sample one siemens more makes, and the resistance that a further mode meets there.
func (v *Surveyor) view() {
	s, m := &v.samples, &v.model
	v.views = grown(v.views, 2*s.n)
	for i, y := range m.shunt[:s.n] { // shunt holds Y of the whole unit
		v.views[2*i], v.views[2*i+1] = length(m.weight[i]), real(m.seenBy(y, i))
	}
}

// hidden says whether an offset lies where some mode hides others.
func (v *Surveyor) hidden(offsetHz float64) bool {
	for i := range v.hides {
		if h := &v.hides[i]; math.Abs(offsetHz-h.centreHz) < hiddenHalves*h.halfHz {
			return true
		}
	}
	return false
}

// widestStep returns the widest gap between neighbouring points that touches the span.
func (v *Surveyor) widestStep(from, to float64) float64 {
	s := &v.samples
	if s.stepHz != 0 || !s.ordered {
		return s.widestStepHz
	}
	widest := 0.0
	for i := 1; i < s.n; i++ {
		a, b := s.offsetHz[i-1], s.offsetHz[i]
		if math.Max(a, b) >= from && math.Min(a, b) <= to {
			widest = math.Max(widest, math.Abs(b-a))
		}
	}
	return widest
}

// The table of energies of modes that ring: from the narrowest width on, in steps of a constant ratio. What is wider than its end settles.
const (
	ringingWidths   = 14
	narrowestRinger = 0.01 // of a step
	widestRinger    = 8.0
)

// tabulate works out E of modes that ring on after the source has passed: the sum of squares of their response to the stepped sweep itself, in the
// middle of the sweep, on a point or between two, whichever is less.
func (v *Surveyor) tabulate(step float64) {
	m, s := &v.model, &v.samples
	i := s.n / 2
	v.tabulated = step
	free := &v.local.free
	for k := range v.ringers {
		half := step * narrowestRinger / 2 * math.Pow(widestRinger/narrowestRinger, float64(k)/(ringingWidths-1))
		after := int(4/(2*math.Pi*half*m.ring.dwell)) + 1
		before := int(20*half/s.meanStepHz) + 2
		from, to := max(0, i-before), min(s.n, i+before+after)
		least := math.Inf(1)
		for _, at := range [...]float64{s.offsetHz[i], (s.offsetHz[i] + s.offsetHz[i-1]) / 2} {
			q := complex(at, half)
			free.resize(to - from)
			m.ring.run(q, from, to, free, false, false)
			sum := 0.0
			for p := from; p < to; p++ {
				sum += square(reciprocal(complex(s.offsetHz[p], 0)-q) + free.value[p-from])
			}
			least = math.Min(least, sum*half*half)
		}
		v.ringers[k] = least
	}
}

// ringingEnergy is E of a mode that rings, from the table; in the last part of the sweep there is no time for it to ring out.
func (v *Surveyor) ringingEnergy(width float64, look *sight) float64 {
	s := &v.samples
	ratio := width / look.step
	energy := math.Pi * ratio / 2
	if ratio < widestRinger {
		place := math.Log(ratio/narrowestRinger) / math.Log(widestRinger/narrowestRinger) * (ringingWidths - 1)
		k := int(math.Min(math.Max(place, 0), ringingWidths-2))
		a, b := math.Log(v.ringers[k]), math.Log(v.ringers[k+1])
		energy = math.Exp(a + (b-a)*(place-float64(k)))
	}
	if s.stepHz == 0 {
		return energy
	}
	last := look.high
	if s.stepHz < 0 {
		last = look.low
	}
	left := (s.offsetHz[s.n-1]-last)/s.stepHz*v.model.ring.dwell + v.model.ring.dwell
	return energy * -math.Expm1(-2*math.Pi*width*left)
}
