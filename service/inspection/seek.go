package inspection

import (
	"math"
	"math/cmplx"
	"slices"

	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// An overtone window is a hundred to a thousand times as wide as the response in it, and most of it shows nothing but C0. A fit of the whole window
// starts from what stands out by eye and misses what a matched filter finds; so the window is sought through first, and only the piece about the best
// match is fitted.

// seenGain is the gain of twice the log-likelihood from which a match counts as a response: 2 ln(tests/false alarms) for 10 000 independent places and
// widths, and one false alarm in a hundred windows.
const seenGain = 27.6

// Shapes of the search.
const (
	wideWindow   = 12.0 // loaded widths of the main mode; a narrower window is fitted whole
	widestShare  = 0.1  // of the window: what is wider is taken for its background
	filterReach  = 20.0 // half widths on either side
	pieceReach   = 8.0  // widths on either side
	leastOfPiece = 33   // points
)

// match is the place of a response that a window may show.
type match struct{ hz, widthHz, gain float64 }

// fitOvertone fits the response of an overtone window.
func (w *workup) fitOvertone(b *bench, index int, expected resonance.Expected) (*fitted, error) {
	s := &w.c.Sweeps[index]
	low, high := s.SpanHz()
	if !w.nominal.sound() || !w.g.scale || w.g.solved == nil || !s.Quantity.Complex() {
		return b.fit(w.c, index, expected, w.g)
	}
	main := w.nominal.est.Unit().Modes[0]
	if err := w.g.solved.Terms(&b.terms, s.FrequencyHz, s.Quantity); err != nil || b.terms.D != 1 {
		return b.fit(w.c, index, expected, w.g)
	}
	narrowest := math.Max(0, real(b.terms.C[0])) / (2 * math.Pi * main.InductanceHenry)
	if high-low < wideWindow*(narrowest+main.BandwidthHz()) {
		return b.fit(w.c, index, expected, w.g)
	}
	noise := network.SampleNoise(w.c.Calibration, s)
	best, noise := seek(s, &b.terms, w.motional(), noise, narrowest, w.reach(s))
	if best.gain < seenGain {
		f := &fitted{sweep: s, index: index, est: b.estimate()}
		*f.est = resonance.Estimate{State: resonance.NoResonance, Detail: "no response stands out of the noise of the window"}
		f.est.Quality.NoiseRMS = noise
		return f, nil
	}
	return w.fitMatch(b, index, best, expected)
}

// reach returns where the overtone of a window may lie.
func (w *workup) reach(s *sweep.Sweep) network.Band {
	centre := w.centreHz(s.Order, s.FrequencyRatio)
	return network.Band{LowHz: centre * (1 - overtoneReach), HighHz: centre * (1 + overtoneReach)}
}

// fitMatch fits the piece of a window about a match. A match that no fit can make a unit of is not nothing: its state says what became of it.
func (w *workup) fitMatch(b *bench, index int, at match, expected resonance.Expected) (*fitted, error) {
	s := &w.c.Sweeps[index]
	low, high := s.SpanHz()
	half := math.Max(pieceReach*at.widthHz, leastOfPiece/2*(high-low)/float64(s.Points()-1))
	piece := *s
	piece.Grid, piece.FrequencyHz, piece.Re, piece.Im = nil, nil, nil, nil
	for i, hz := range s.FrequencyHz {
		if math.Abs(hz-at.hz) <= half {
			piece.FrequencyHz = append(piece.FrequencyHz, hz)
			piece.Re, piece.Im = append(piece.Re, s.Re[i]), append(piece.Im, s.Im[i])
		}
	}
	part := *w.c
	part.Sweeps = []sweep.Sweep{piece}
	expected.ResonanceHz = at.hz
	expected.ResistanceOhm = 0
	f, err := b.fit(&part, 0, expected, w.g)
	if err != nil {
		return nil, err
	}
	f.sweep, f.index = s, index
	if f.est.State == resonance.NoResonance || f.est.State == resonance.OutsideSweep {
		f.est.State = resonance.TooNoisy
		f.est.Detail = "a response stands out of the noise, but its parameters cannot be told"
	}
	return f, nil
}

// seek looks for the response that stands out most within reach, with filters of every width from the narrowest to a share of the window, and returns
// it with the noise of a sample. What the samples are compared with is C0 and its loss with the arm of the main mode, and a slow background.
func seek(s *sweep.Sweep, t *network.Terms, motional func(float64) complex128, noise, narrowestHz float64, within network.Band) (best match, rms float64) {
	order := make([]int, s.Points())
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch {
		case s.FrequencyHz[a] < s.FrequencyHz[b]:
			return -1
		case s.FrequencyHz[a] > s.FrequencyHz[b]:
			return 1
		}
		return 0
	})
	hz, rest := background(s, t, motional, order)
	rms = math.Max(noise, roughNoise(rest))
	n := len(hz)
	span := hz[n-1] - hz[0]
	step := span / float64(n-1)
	for width := math.Max(narrowestHz, step/4); width <= widestShare*span; width *= 2 {
		half := width / 2
		first := 0
		for at := math.Max(hz[0], within.LowHz); at <= math.Min(hz[n-1], within.HighHz); at += math.Max(step/2, half/2) {
			for hz[first] < at-filterReach*half-step {
				first++
			}
			var product complex128
			var energy float64
			for i := first; i < n && hz[i] <= at+filterReach*half+step; i++ {
				x := (hz[i] - at) / half
				share := 1 / (1 + x*x)
				product += rest[i] * complex(share, share*x) // conj of 1/(1 + jx)
				energy += share
			}
			if gain := 2 * real(product*cmplx.Conj(product)) / (energy * rms * rms); gain > best.gain {
				best = match{at, width, gain}
			}
		}
	}
	return best, rms
}

// background returns frequencies in ascending order and what a capacitance with its loss and a background of second degree leave of the samples. Points
// that stand out are left out of the background, so that a strong response does not become a part of it.
func background(s *sweep.Sweep, t *network.Terms, motional func(float64) complex128, order []int) (hz []float64, rest []complex128) {
	shunt := fitShunt(s, t, nil, motional, 0)
	n := len(order)
	hz, rest = make([]float64, n), make([]complex128, n)
	level := make([]complex128, n)
	for k, i := range order {
		hz[k] = s.FrequencyHz[i]
		y := complex(shunt.siemens, 2*math.Pi*hz[k]*shunt.farad) + motional(hz[k])
		level[k] = complex(s.Re[i], s.Im[i]) - t.Sample(i, y)
	}
	middle, half := (hz[0]+hz[n-1])/2, (hz[n-1]-hz[0])/2
	copy(rest, level)
	threshold := math.Inf(1)
	for range 4 {
		var normal [3][3]float64
		var right [3]complex128
		for k := range n {
			if cmplx.Abs(rest[k]) > threshold {
				continue
			}
			x := (hz[k] - middle) / half
			powers := [3]float64{1, x, x * x}
			for a := range 3 {
				right[a] += level[k] * complex(powers[a], 0)
				for b := range 3 {
					normal[a][b] += powers[a] * powers[b]
				}
			}
		}
		c, ok := solveThree(normal, right)
		if !ok {
			break
		}
		for k := range n {
			x := complex((hz[k]-middle)/half, 0)
			rest[k] = level[k] - c[0] - x*(c[1]+x*c[2])
		}
		threshold = 4 * roughNoise(rest)
	}
	return hz, rest
}

// solveThree solves three equations by elimination.
func solveThree(m [3][3]float64, right [3]complex128) (x [3]complex128, ok bool) {
	for k := range 3 {
		if !(m[k][k] > 0) {
			return x, false
		}
		for r := k + 1; r < 3; r++ {
			share := m[r][k] / m[k][k]
			for c := k; c < 3; c++ {
				m[r][c] -= share * m[k][c]
			}
			right[r] -= complex(share, 0) * right[k]
		}
	}
	for k := 2; k >= 0; k-- {
		x[k] = right[k]
		for c := k + 1; c < 3; c++ {
			x[k] -= complex(m[k][c], 0) * x[c]
		}
		x[k] /= complex(m[k][k], 0)
	}
	return x, true
}

// roughNoise returns the complex rms noise by the median of squared differences of neighbours, 2 sigma^2 ln 2, in which few responses do not show.
func roughNoise(v []complex128) float64 {
	if len(v) < 3 {
		return 0
	}
	squares := make([]float64, len(v)-1)
	for i := range squares {
		d := v[i+1] - v[i]
		squares[i] = real(d)*real(d) + imag(d)*imag(d)
	}
	slices.Sort(squares)
	return math.Sqrt(squares[len(squares)/2] / (2 * math.Ln2))
}
