package survey

import "math"

// The bank of templates: half-widths from half a step's resonator, or a quarter of what the main mode would have without a network, to well beyond
// the widest mode expected, in the ratio bankRatio, whose root a width may be off by at the cost of 2 % of the energy.
const (
	bankRatio         = 1.7
	narrowestTemplate = 0.35 // of a step: narrower modes look like it
	narrowestOfMain   = 0.3  // of the main mode's motional width
	widestOfMain      = 3.0  // of its loaded width
	widestOfSweep     = 0.05 // of the span
	templateReach     = 4.0  // half-widths on either side that are looked at: 84 % of the energy
	centreSpacing     = 1.4  // half-widths from one place to the next: in the middle between two 90 % of the energy is left
	mostPlaces        = 3    // in a step of the grid
	beyondEdge        = 4.0  // half-widths beyond the edges that are searched
	pointsPerHalf     = 2.0  // blocks of points in a half-width that wide templates are laid over
	ringingReach      = 2.5  // time constants after a resonance that are looked at
	mostPeaks         = 24
)

// peak is a place where the residual looks like a mode.
type peak struct {
	centreHz, halfHz float64
	gain             float64 // of twice the log-likelihood
}

// level is the sweep with neighbouring points taken together, two at a time from one level to the next.
type level struct {
	offsetHz []float64
	product  []complex128 // sum of conj(weight) residual
	energy   []float64    // sum of |weight|^2
	stepHz   float64
}

// scanner looks for modes in what a model leaves.
type scanner struct {
	levels [12]level
	used   int
	order  []int // points by frequency, where they were not measured so

	// The template on a uniform grid, conjugate, and its square, and what a ringing one is worked out on.
	re, im, square []float64
	free           free
	ring           ring
	grid           samples

	list  [mostPeaks]peak
	n     int
	tests int
}

// bank returns the narrowest and the widest half-width to look for.
func (v *Surveyor) bank() (narrowest, widest float64) {
	s := &v.samples
	narrowest, widest = narrowestTemplate*s.meanStepHz/2, widestOfSweep*s.span()/2
	if v.now.modes == 0 && v.request.NarrowestHz == 0 {
		narrowest = s.meanStepHz / 2 // the strongest mode is found with any template
	}
	if loaded, motional := v.mainWidths(); loaded > 0 {
		narrowest = math.Max(narrowest, narrowestOfMain*motional/2)
		widest = math.Max(widest, widestOfMain*loaded/2)
	}
	if w := v.request.NarrowestHz; w > 0 {
		narrowest = math.Max(w, narrowestTemplate*s.meanStepHz) / 2
	}
	if w := v.request.WidestHz; w > 0 {
		widest = w / 2
	}
	return narrowest, math.Max(widest, narrowest)
}

// scan lays the bank over the residual and leaves what stands out by more than least, of twice the log-likelihood for noise of the given
// variance of a complex sample, in the list, strongest first. residual holds pairs.
func (c *scanner) scan(m *model, residual []float64, narrowest, widest, variance, least float64) {
	c.n, c.tests = 0, 0
	c.prepare(m, residual)
	for half := narrowest; half < widest*math.Sqrt(bankRatio); half *= bankRatio {
		l := &c.levels[0]
		for k := 1; k < c.used && c.levels[k].stepHz <= half/pointsPerHalf; k++ {
			l = &c.levels[k]
		}
		switch {
		case m.s.stepHz != 0:
			c.scanUniform(m, l, half, variance, least)
		case m.memory:
			c.scanRinging(m, half, variance, least)
		default:
			c.scanSettled(m, l, half, variance, least)
		}
	}
}

// prepare builds the levels.
func (c *scanner) prepare(m *model, residual []float64) {
	s := m.s
	c.levels[0].resize(s.n)
	l := &c.levels[0]
	l.stepHz = s.meanStepHz
	if !s.ordered && !m.memory {
		c.sort(s)
	}
	for i := range s.n {
		p := i
		if !s.ordered && !m.memory {
			p = c.order[i]
		}
		w := m.weight[p]
		l.offsetHz[i] = s.offsetHz[p]
		// -residual is what the model lacks
		l.product[i] = complex(-residual[2*p], -residual[2*p+1]) * complex(real(w), -imag(w))
		l.energy[i] = square(w)
	}
	c.used = 1
	if m.memory {
		return
	}
	for c.used < len(c.levels) && len(c.levels[c.used-1].energy) >= 64 {
		below, l := &c.levels[c.used-1], &c.levels[c.used]
		n := len(below.energy) / 2
		l.resize(n)
		l.stepHz = 2 * below.stepHz
		for i := range n {
			l.offsetHz[i] = (below.offsetHz[2*i] + below.offsetHz[2*i+1]) / 2
			l.product[i] = below.product[2*i] + below.product[2*i+1]
			l.energy[i] = below.energy[2*i] + below.energy[2*i+1]
		}
		c.used++
	}
}

func (l *level) resize(n int) {
	l.offsetHz, l.product, l.energy = grown(l.offsetHz, n), grown(l.product, n), grown(l.energy, n)
}

// sort orders the points by frequency: a heap sort on indices, which needs no memory of its own.
func (c *scanner) sort(s *samples) {
	c.order = grown(c.order, s.n)
	for i := range c.order {
		c.order[i] = i
	}
	sink := func(i, n int) {
		for {
			child := 2*i + 1
			if child >= n {
				return
			}
			if child+1 < n && s.offsetHz[c.order[child+1]] > s.offsetHz[c.order[child]] {
				child++
			}
			if s.offsetHz[c.order[i]] >= s.offsetHz[c.order[child]] {
				return
			}
			c.order[i], c.order[child] = c.order[child], c.order[i]
			i = child
		}
	}
	for i := s.n/2 - 1; i >= 0; i-- {
		sink(i, s.n)
	}
	for n := s.n - 1; n > 0; n-- {
		c.order[0], c.order[n] = c.order[n], c.order[0]
		sink(0, n)
	}
}

// scanSettled lays the template of one half-width over the sweep. Its centres lie a half-width apart, closer to each other than any two modes that
// a sweep can tell apart, and where a step is wider than that at three places in a step.
func (c *scanner) scanSettled(m *model, l *level, half, variance, least float64) {
	s := m.s
	gap := math.Max(centreSpacing*half, s.meanStepHz/mostPlaces)
	reach := templateReach * half
	n := len(l.energy)
	sign := 1.0
	if l.offsetHz[n-1] < l.offsetHz[0] {
		sign = -1
	}
	from, to := 0, 0
	track := tracker{c: c, half: half, least: least * variance / 2, scale: 2 / variance}
	for centre := s.lowHz - beyondEdge*half; centre <= s.highHz+beyondEdge*half; centre += gap {
		at := centre
		if sign < 0 {
			at = s.lowHz + s.highHz - centre // the window moves through the points in their order
		}
		for to < n && sign*(l.offsetHz[to]-at) <= math.Max(reach, l.stepHz) {
			to++
		}
		for from < to && sign*(l.offsetHz[from]-at) < -math.Max(reach, l.stepHz) {
			from++
		}
		var product complex128
		var energy float64
		for i := from; i < to; i++ {
			t := (l.offsetHz[i] - at) / half
			a := 1 / (1 + t*t)
			product += l.product[i] * complex(a, t*a) // conj of 1/(1 + jt)
			energy += a * l.energy[i]
		}
		track.see(at, product, energy)
		c.tests++
	}
	track.done()
}

// scanUniform is scanSettled for a uniform grid, where the template is the same at every place and is worked out once for each place in a step.
// The same holds for one that rings: it goes on for some points after the source has passed.
func (c *scanner) scanUniform(m *model, l *level, half, variance, least float64) {
	n := len(l.energy)
	step := (l.offsetHz[n-1] - l.offsetHz[0]) / float64(n-1)
	size := math.Abs(step)
	places, stride := 1, 1
	if half < size {
		places = min(mostPlaces, int(math.Ceil(size/(centreSpacing*half))))
	} else {
		stride = int(centreSpacing * half / size)
	}
	reach := max(1, int(templateReach*half/size))
	beyond := int(beyondEdge * half / size)
	after := 1
	if m.memory {
		after += int(ringingReach / (2 * math.Pi * half * m.ring.dwell))
		after = min(after, n)
	}
	for place := range places {
		shift := float64(place) / float64(places)
		c.template(m, complex(shift*step, half), step, reach, after)
		track := tracker{c: c, half: half, least: least * variance / 2, scale: 2 / variance}
		for at := -beyond; at < n+beyond; at += stride {
			from, to := max(0, at-reach), min(n, at+reach+after+1)
			if from >= to {
				continue
			}
			c.tests++
			first := from - (at - reach)
			re, im, square := c.re[first:first+to-from], c.im[first:first+to-from], c.square[first:first+to-from]
			product, weight := l.product[from:to], l.energy[from:to]
			var sumRe, sumIm, energy float64
			for i, a := range re {
				b, v := im[i], product[i]
				sumRe += real(v)*a - imag(v)*b
				sumIm += real(v)*b + imag(v)*a
				energy += weight[i] * square[i]
			}
			// The common case is a place where nothing stands out; it costs no division.
			if g := sumRe*sumRe + sumIm*sumIm; g > track.least*energy || track.above {
				track.see(l.offsetHz[0]+(float64(at)+shift)*step, complex(sumRe, sumIm), energy)
			}
		}
		track.done()
	}
}

// template works out the template of a pole, given from the point 0 of a uniform grid, from the point -reach to reach + after.
func (c *scanner) template(m *model, q complex128, step float64, reach, after int) {
	size := 2*reach + after + 1
	c.re, c.im, c.square = grown(c.re, size), grown(c.im, size), grown(c.square, size)
	if m.memory {
		g := &c.grid
		g.n, g.offsetHz = size+1, grown(g.offsetHz, size+1)
		for k := range g.offsetHz {
			g.offsetHz[k] = float64(k-reach-1) * step
		}
		g.dwell, g.averaging = m.ring.dwell, m.ring.averaging
		c.ring.set(g, 1)
		c.free.resize(size)
		c.ring.run(q, 1, size+1, &c.free, false, false) // settled at the first point
	}
	half := imag(q)
	for k := range size {
		d := float64(k-reach)*step - real(q)
		u := half / (d*d + half*half)
		v := complex(half*u, -d*u) // 1/(1 + jd/half) = -j half/(f - q)
		if m.memory {
			v += complex(0, -half) * c.free.value[k]
		}
		c.re[k], c.im[k] = real(v), -imag(v)
		c.square[k] = square(v)
	}
}

// scanRinging lays a template that rings over a sweep of uneven steps: it is worked out anew at every place, over all points.
func (c *scanner) scanRinging(m *model, half, variance, least float64) {
	s := m.s
	gap := math.Max(centreSpacing*half, s.meanStepHz/mostPlaces)
	track := tracker{c: c, half: half, least: least * variance / 2, scale: 2 / variance}
	for centre := s.lowHz - beyondEdge*half; centre <= s.highHz+beyondEdge*half; centre += gap {
		c.tests++
		product, energy := c.matchRinging(m, &c.levels[0], complex(centre, half), 0, s.n)
		track.see(centre, product, energy)
	}
	track.done()
}

// matchRinging returns the product of the residual with a template from one point to another, and the template's energy.
func (c *scanner) matchRinging(m *model, l *level, q complex128, from, to int) (product complex128, energy float64) {
	c.free.resize(to - from)
	m.ring.run(q, from, to, &c.free, false, false)
	up := complex(0, -imag(q))
	for i := from; i < to; i++ {
		t := up * (reciprocal(complex(m.s.offsetHz[i], 0)-q) + c.free.value[i-from])
		product += l.product[i] * complex(real(t), -imag(t))
		energy += l.energy[i] * square(t)
	}
	return product, energy
}

// tracker follows the matches of one template over the sweep and keeps the highest of each stretch that stands out.
type tracker struct {
	c           *scanner
	half        float64
	least       float64 // of |product|^2/energy
	scale       float64 // from that to a gain
	above       bool
	best        float64
	bestAt      float64
	fallen      bool
	lowestSince float64
}

// see takes the next match. A stretch ends where the match falls to half of its best.
func (t *tracker) see(centreHz float64, product complex128, energy float64) {
	gain := 0.0
	if energy > 0 {
		gain = square(product) / energy
	}
	if gain <= t.least {
		t.done()
		return
	}
	if t.above && t.fallen && gain > 1.5*t.lowestSince {
		t.done()
	}
	if !t.above || gain > t.best {
		t.above, t.best, t.bestAt, t.fallen = true, gain, centreHz, false
		return
	}
	if gain < t.best/2 {
		if !t.fallen || gain < t.lowestSince {
			t.lowestSince = gain
		}
		t.fallen = true
	}
}

// done ends a stretch.
func (t *tracker) done() {
	if t.above {
		t.c.add(peak{t.bestAt, t.half, t.best * t.scale})
	}
	t.above = false
}

// add keeps a peak if it is among the strongest. Of two within a width of each other only the stronger stays.
func (c *scanner) add(p peak) {
	for i := 0; i < c.n; i++ {
		q := &c.list[i]
		if math.Abs(p.centreHz-q.centreHz) > 2*math.Max(p.halfHz, q.halfHz) {
			continue
		}
		if p.gain <= q.gain {
			return
		}
		copy(c.list[i:], c.list[i+1:c.n])
		c.n--
		i--
	}
	if c.n == mostPeaks {
		if p.gain <= c.list[c.n-1].gain {
			return
		}
		c.n--
	}
	i := c.n
	for ; i > 0 && c.list[i-1].gain < p.gain; i-- {
		c.list[i] = c.list[i-1]
	}
	c.list[i] = p
	c.n++
}
