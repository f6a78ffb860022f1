package resonance

import (
	"math"
	"math/cmplx"
)

// loaded is the resonance as the fixture shows it: the pole of the sample. The termination widens it and, through C0, moves it a little.
type loaded struct {
	centreHz float64 // from points.referenceHz
	halfHz   float64 // half the half-power width
	response float64 // height of the main response over its background, in units of the raw sample
}

// timeConstant returns the loaded amplitude time constant 1/(2 pi half) in seconds, which is 2 L1/(R1 + 2RT).
func (l *loaded) timeConstant() float64 { return 1 / (2 * math.Pi * l.halfHz) }

// inFixture returns what parameters of the model look like in the fixture.
func (m *forward) inFixture(params []float64) loaded {
	p := m.points
	r1, l1 := math.Exp(params[LogResistance]), math.Exp(params[LogInductance])
	i := p.nearest(params[ResonanceHz])
	shunt := complex(m.value(params, ShuntConductanceSiemens), p.angular[i]*params[ShuntCapacitanceFarad])
	if p.impedance {
		// A zero, not a pole: the sample dips from the reactance of C0 down to R1.
		return loaded{
			centreHz: params[ResonanceHz], halfHz: r1 / (4 * math.Pi * l1),
			response: p.scale[i] * cmplx.Abs(1/(shunt*(1+shunt*complex(r1, 0)))),
		}
	}
	source := complex(p.sourceRe[i], p.sourceIm[i])
	spread := 1 + source*shunt
	seen := source / spread
	resistance := r1 + real(seen)
	return loaded{
		centreHz: params[ResonanceHz] - imag(seen)/(4*math.Pi*l1),
		halfHz:   resistance / (4 * math.Pi * l1),
		response: p.scale[i] / (resistance * real(spread*cmplx.Conj(spread))),
	}
}

// supported says whether enough points carry the response: (sum a)^2/sum a^2 of them with a = 1/(1 + t^2), the power of the response at each. A
// resonance that lives on one or two points is a wild point. One that rings is seen by all points that follow.
func (f *Fitter) supported(l *loaded) bool {
	if f.memory() {
		return true
	}
	var sum, squares float64
	for _, d := range f.points.offsetHz {
		t := (d - l.centreHz) / l.halfHz
		a := 1 / (1 + t*t)
		sum += a
		squares += a * a
	}
	return sum*sum >= leastSupport*squares
}

// leastSupport is the least number of points that must carry a response. Two points for each loaded bandwidth give 4.
const leastSupport = 2.5

// background returns what the solution has at a point without the motional arm, in the plane of points.
func (f *Fitter) background(i int) complex128 {
	p := &f.points
	params := f.best.params[:]
	if f.request.ScaleUnknown {
		x := (p.offsetHz[i] - f.shape.middle) / f.shape.half
		return complex(params[shapeBackground]+x*params[shapeSlope], params[shapeBackground+1]+x*params[shapeSlope+1])
	}
	m := f.known()
	shunt := complex(m.value(params, ShuntConductanceSiemens), p.angular[i]*params[ShuntCapacitanceFarad])
	return shunt / (1 + complex(p.sourceRe[i], p.sourceIm[i])*shunt)
}

// largestResponse returns the largest distance of a sample from the background of the solution: what a sweep shows of a resonance that had no
// time to reach its height.
func (f *Fitter) largestResponse() float64 {
	largest := 0.0
	for i := range f.points.n {
		largest = math.Max(largest, cmplx.Abs(f.responseAt(i)))
	}
	return largest
}
