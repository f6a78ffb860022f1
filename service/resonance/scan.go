package resonance

import "math"

// peaks is a short list of the strongest resonances that a scan found, strongest first.
type peaks struct {
	pole [4]pole
	gain [4]float64 // sum of squares that each takes off a constant
	n    int
}

// add keeps a pole if it is among the strongest. Of two that lie within half a width of each other only the stronger stays.
func (l *peaks) add(q pole, gain float64) {
	for i := range l.n {
		near := math.Max(q.halfHz, l.pole[i].halfHz)
		if math.Abs(q.centreHz-l.pole[i].centreHz) > near {
			continue
		}
		if gain <= l.gain[i] {
			return
		}
		copy(l.pole[i:], l.pole[i+1:l.n])
		copy(l.gain[i:], l.gain[i+1:l.n])
		l.n--
		break
	}
	if l.n == len(l.pole) {
		if gain <= l.gain[l.n-1] {
			return
		}
		l.n--
	}
	i := l.n
	for ; i > 0 && l.gain[i-1] < gain; i-- {
		l.pole[i], l.gain[i] = l.pole[i-1], l.gain[i-1]
	}
	l.pole[i], l.gain[i] = q, gain
	l.n++
}

const (
	scanReach       = 3.0  // bandwidths beyond each edge of the sweep that are searched
	scanSpacing     = 0.5  // distance of the positions tried, in bandwidths
	scanWidthStep   = 2.5  // ratio of the widths tried: a template of a width wrong by its root still takes 90 % of the energy
	scanWindow      = 8.0  // bandwidths beside a position that are looked at: beyond, a response is hardly above its background
	scanExpectation = 1.7  // with an expected unit, the widths tried lie within this factor squared of the expected one
	scanDensity     = 16.0 // points in half a width that are looked at; of more, every second, third ... is taken
)

// scan lays the response of a resonance, 1/(1 + jt) with t = (f - centre)/half, over the samples at positions all over the sweep and beyond
// its edges and in all widths that the sweep can show, each with the amplitude and background that suit it best, and adds the
// strongest to the list. Unlike an algebraic fit it cannot be led astray by noise or by wild points, which are few and match no template.
// expectedHalfHz narrows the widths; 0: unknown.
func (q *plane) scan(list *peaks, expectedHalfHz float64) {
	low, high := math.Inf(1), math.Inf(-1)
	for _, d := range q.offsetHz {
		low, high = math.Min(low, d), math.Max(high, d)
	}
	n := len(q.offsetHz)
	step := (high - low) / float64(n-1)
	narrowest, widest := 0.4*step, high-low
	if expectedHalfHz > 0 {
		narrowest = math.Max(narrowest, expectedHalfHz/(scanExpectation*scanExpectation))
		widest = math.Max(narrowest, math.Min(2*widest, expectedHalfHz*scanExpectation*scanExpectation))
	}
	for half := widest; half >= narrowest*0.99; half /= scanWidthStep {
		stride := 1 + int(half/step/scanDensity)
		best, strongest := pole{}, 0.0
		second, strong := pole{}, 0.0
		for centre := low - 2*scanReach*half; centre <= high+2*scanReach*half; centre += 2 * scanSpacing * half {
			from, to := q.window(centre-2*scanWindow*half, centre+2*scanWindow*half)
			found, gain := q.match(centre, half, from, to, stride)
			switch {
			case gain > strongest:
				if math.Abs(found.centreHz-best.centreHz) > 4*half {
					second, strong = best, strongest
				}
				best, strongest = found, gain
			case gain > strong && math.Abs(found.centreHz-best.centreHz) > 4*half:
				second, strong = found, gain
			}
		}
		if strong > 0 {
			list.add(second, strong)
		}
		if strongest > 0 {
			list.add(best, strongest)
		}
	}
}

// window returns the range of points whose offsets lie between two values; all points if the sweep is not in order.
func (q *plane) window(fromHz, toHz float64) (from, to int) {
	n := len(q.offsetHz)
	if !q.ordered {
		return 0, n
	}
	descending := q.offsetHz[0] > q.offsetHz[n-1]
	// The first index at or beyond a value, in the direction of the sweep.
	search := func(value float64) int {
		lower, upper := 0, n
		for lower < upper {
			middle := (lower + upper) / 2
			beyond := q.offsetHz[middle] >= value
			if descending {
				beyond = q.offsetHz[middle] <= value
			}
			if beyond {
				upper = middle
			} else {
				lower = middle + 1
			}
		}
		return lower
	}
	if descending {
		return search(toHz), search(fromHz)
	}
	return search(fromHz), search(toHz)
}

// match fits amplitude and background of one template to every stride-th of the points from..to-1 and returns the pole and what it takes off the
// weighted sum of squares about the mean.
func (q *plane) match(centreHz, halfHz float64, from, to, stride int) (pole, float64) {
	if to-from < 5 {
		return pole{}, 0
	}
	var s, sv1, sv2, st1, st2, stv1, stv2 float64
	inverse := 1 / halfHz
	for i := from; i < to; i += stride {
		t := (q.offsetHz[i] - centreHz) * inverse
		w := q.weight[i]
		w *= w
		a := w / (1 + t*t)
		b := -t * a // w/(1 + jt) = a + jb
		vr, vi := q.re[i], q.im[i]
		s += w
		sv1 += w * vr
		sv2 += w * vi
		st1 += a // which is w |1/(1 + jt)|^2 as well
		st2 += b
		stv1 += a*vr + b*vi
		stv2 += a*vi - b*vr
	}
	mean := complex(sv1/s, sv2/s)
	template := complex(st1/s, st2/s)
	energy := st1 - s*(real(template)*real(template)+imag(template)*imag(template))
	if !(energy > 1e-9*st1) {
		return pole{}, 0
	}
	product := complex(stv1, stv2) - complex(s, 0)*complex(real(template), -imag(template))*mean
	amplitude := product / complex(energy, 0)
	gain := (real(product)*real(product) + imag(product)*imag(product)) / energy
	// amplitude/(1 + jt) = amplitude half/j /(f - centre - j half)
	return pole{
		centreHz: centreHz, halfHz: halfHz,
		residue: amplitude * complex(0, -halfHz), background: mean - amplitude*template,
	}, gain * float64(stride)
}
