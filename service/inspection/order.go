package inspection

import (
	"fmt"
	"math"
	"strings"

	"example.com/admit/service/crystal"
	"example.com/admit/service/parttype"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// On which overtone a response lies cannot be told from its frequency: a unit of 25 MHz may be a fundamental or a third overtone. It shows in the
// ratio of the capacitances, r_n = C0/Cn = n^2 r_1, and in the responses at other multiples of one fundamental, n^2 Cn being the same for all of them.

// mostOrder is the highest order that is thought of.
const mostOrder = 13

// What r_1 = C0/C1 of fundamentals is: most lie near usualRatio; an ideal plate of AT quartz has 158, and none has less, while holders add to C0
// and lead to twice as much and more. The logarithm spreads by less below than above. Common practice, and the published parameter sets of testdata.
const (
	usualRatio       = 280.0
	spreadBelow      = 0.25
	spreadAbove      = 0.45
	foreignShare     = 0.1 // of units or set-ups in which C0 is not that of the unit: a cell, a cable
	foreignMost      = 30  // times larger at most
	chance           = 1e-3
	shareSpread      = 0.2  // of the logarithm of n^2 Cn
	beyondOfferShare = 0.05 // of orders that makers do not list
)

// offered are the ranges in which makers offer overtones of AT units, in hertz (a maker's page on overtone ranges); outside, the likelihood falls with
// the distance.
var offered = map[int][2]float64{1: {1e6, 29e6}, 3: {18e6, 75e6}, 5: {50e6, 120e6}, 7: {80e6, 180e6}}

const (
	offerSpread = 0.35  // of the logarithm of the frequency
	offerLeast  = 0.003 // specials exist
)

// response is one mode of the unit that takes part in telling the order.
type response struct {
	est   *resonance.Estimate
	hz    float64
	farad float64 // Cn, 0 where it is not known
}

// overtoneOrder tells the order of the main response; nil for a unit that is no plate in thickness shear, or was not found.
func (w *workup) overtoneOrder() *verdict.Order {
	if w.p.VibrationMode != parttype.ThicknessShear || !w.nominal.sound() {
		return nil
	}
	all := []response{w.response(w.nominal)}
	for _, f := range w.fits { // whatever order a window was taken for: where its response lies counts
		if f != nil && f.sweep.Role == sweep.Overtone && f.sound() {
			all = append(all, w.response(f))
		}
	}
	if !w.g.scale && len(all) == 1 {
		return nil
	}
	o := &verdict.Order{}
	var sum float64
	for n := 1; n <= mostOrder; n += 2 {
		p := offer(n, all[0].hz) * w.byCapacitance(n, all[0])
		for _, other := range all[1:] {
			p *= byResponse(n, all[0], other)
		}
		o.Candidates = append(o.Candidates, verdict.OrderCandidate{Order: n, Probability: p})
		sum += p
	}
	if !(sum > 0) {
		return nil
	}
	for i := range o.Candidates {
		c := &o.Candidates[i]
		if c.Probability /= sum; c.Probability > o.Probability {
			o.Order, o.Probability = c.Order, c.Probability
		}
	}
	w.orderResponses(o, all)
	o.Text = w.orderText(o, all[0])
	return o
}

func (w *workup) response(f *fitted) response {
	m := f.est.Unit().Modes[0]
	r := response{est: f.est, hz: m.ResonanceHz}
	if w.g.scale {
		r.farad = m.CapacitanceFarad()
	}
	return r
}

// offer returns how usual an order is at a frequency.
func offer(n int, hz float64) float64 {
	span, listed := offered[n]
	if !listed {
		return beyondOfferShare
	}
	distance := math.Max(0, math.Max(math.Log(span[0]/hz), math.Log(hz/span[1]))) / offerSpread
	return math.Max(offerLeast, math.Exp(-distance*distance/2))
}

// byCapacitance returns the likelihood of the capacitance ratio if the main response is of an order.
func (w *workup) byCapacitance(n int, main response) float64 {
	c0 := main.est.Unit().ShuntCapacitanceFarad
	if w.shunt != nil {
		c0 = w.shunt.Value
	}
	if !w.g.scale || !(c0 > 0) || !(main.farad > 0) {
		return 1
	}
	x := math.Log(c0 / main.farad / float64(n*n) / usualRatio)
	spread := spreadAbove
	if x < 0 {
		spread = spreadBelow
	}
	usual := 2 / (math.Sqrt(2*math.Pi) * (spreadBelow + spreadAbove)) * math.Exp(-x*x/(2*spread*spread))
	foreign := 0.0
	if x > 0 && x < math.Log(foreignMost) {
		foreign = 1 / math.Log(foreignMost)
	}
	return (1-foreignShare)*usual + foreignShare*foreign
}

// byResponse returns the likelihood of another response if the main one is of an order: it must lie near an odd multiple of the same fundamental, and be
// as strong as such an overtone is.
func byResponse(n int, main, other response) float64 {
	m := multipleOf(n, main, other)
	offset := other.hz*float64(n)/(main.hz*float64(m)) - 1
	if m > mostOrder || math.Abs(offset) > overtoneReach {
		return chance
	}
	if main.farad > 0 && other.farad > 0 {
		z := math.Log(float64(m*m)*other.farad/(float64(n*n)*main.farad)) / shareSpread
		return math.Max(chance, math.Exp(-z*z/2))
	}
	return 1
}

// multipleOf returns the odd order that another response has if the main one has order n.
func multipleOf(n int, main, other response) int {
	half := math.Round((other.hz/main.hz*float64(n) - 1) / 2)
	return 2*int(math.Max(0, math.Min(half, 1e6))) + 1
}

// orderResponses gives every response its order, and holds it against the lowest.
func (w *workup) orderResponses(o *verdict.Order, all []response) {
	orders := make([]int, len(all))
	lowest := 0
	for i, r := range all {
		orders[i] = o.Order
		if i > 0 {
			orders[i] = multipleOf(o.Order, all[0], r)
		}
		if orders[i] < orders[lowest] {
			lowest = i
		}
	}
	for i, r := range all {
		out := verdict.OrderedResponse{Order: orders[i]}
		hz, ok := measure(r.est, func(u crystal.Unit) (float64, bool) { return u.Modes[0].ResonanceHz, true })
		if !ok {
			continue
		}
		out.FrequencyHz = hz
		if w.g.scale {
			if farad, ok := measure(r.est, func(u crystal.Unit) (float64, bool) { return u.Modes[0].CapacitanceFarad(), true }); ok {
				out.CapacitanceFarad = &farad
			}
		}
		if i != lowest {
			n, m := float64(orders[i]), float64(orders[lowest])
			both := []*resonance.Estimate{all[lowest].est, r.est}
			out.MultipleRatio = w.orderValue(both, func(low, high crystal.Mode) float64 { return high.ResonanceHz * m / (low.ResonanceHz * n) })
			if w.g.scale {
				out.CapacitanceShare = w.orderValue(both, func(low, high crystal.Mode) float64 {
					return n * n * high.CapacitanceFarad() / (m * m * low.CapacitanceFarad())
				})
			}
		}
		o.Responses = append(o.Responses, out)
	}
}

func (w *workup) orderValue(both []*resonance.Estimate, f func(low, high crystal.Mode) float64) *verdict.Value {
	q, ok := quantityFrom(both, func(u []crystal.Unit) (float64, bool) { return f(u[0].Modes[0], u[1].Modes[0]), true })
	if !ok {
		return nil
	}
	v, _, ok := q.measured()
	if !ok {
		return nil
	}
	return &v
}

// orderText says the order in words, how sure that is, and why.
func (w *workup) orderText(o *verdict.Order, main response) string {
	name := fmt.Sprintf("on its overtone %d", o.Order)
	if o.Order == 1 {
		name = "on its fundamental"
	}
	text := fmt.Sprintf("The unit marked %s answers %s, with a probability of %s.", verdict.FormatBound(w.p.NominalFrequencyHz, verdict.UnitHertz), name, surely(o.Probability))
	if c0 := main.est.Unit().ShuntCapacitanceFarad; w.g.scale && main.farad > 0 && c0 > 0 {
		r := c0 / main.farad
		text += fmt.Sprintf(" C0/C1 is %.0f", r)
		if o.Order > 1 {
			text += fmt.Sprintf(", %.0f times %d^2", r/float64(o.Order*o.Order), o.Order)
		}
		text += "; fundamentals have 160 to 600."
	}
	if len(o.Responses) > 1 {
		var parts []string
		for _, r := range o.Responses {
			part := fmt.Sprintf("%s (order %d", verdict.FormatBound(math.Round(r.FrequencyHz.Value), verdict.UnitHertz), r.Order)
			if r.CapacitanceShare != nil {
				part += fmt.Sprintf(", n^2 Cn/C1 = %.3f", r.CapacitanceShare.Value)
			}
			parts = append(parts, part+")")
		}
		text += " Responses: " + strings.Join(parts, ", ") + "."
	}
	return text
}

// surely writes a probability in percent, never as certainty.
func surely(p float64) string {
	if p > 0.999 {
		return "more than 99.9 %"
	}
	return fmt.Sprintf("%.3g %%", 100*p)
}
