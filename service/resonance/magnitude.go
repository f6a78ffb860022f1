package resonance

import "math"

// magnitude is the model of samples without phase: y = |T + noise|, which are Rice distributed, and near the noise floor neither normal nor
// free of bias. Its residuals are those whose squares add up to the likelihood: with u = |T|/s and v = y/s, s the standard deviation of
// one part of the noise,
//
//	D(u) = (u - v)^2 - 2 ln(I0(uv) exp(-uv)) - the least value of that,    residual = s sign(u - u') sqrt(D)
//
// u' being where it is least: the root of u = v I1(uv)/I0(uv), and 0 where v^2 <= 2. Far above the floor the residual is |T| - y, with the
// bias s^2/2y taken off. Minimising the sum of squares is maximum likelihood at any level, and the minimum's curvature the
// information. Source: S. O. Rice, Mathematical analysis of random noise, Bell System Technical Journal 24 (1945) 46, section 3.10.
//
// It fits |T| of an inner model: of the settled one, whose residual with samples of 0 is T but for a phase, or, in a network that is not
// known, of power.
type magnitude struct {
	inner     problem
	settled   forward
	power     power
	sample    []float64
	deviation float64   // s
	most      []float64 // u'
	least     []float64 // what is taken off D
	slope     []float64 // derivative of the residual by |T|
	residual  []float64 // of the inner model, and
	jacobian  []float64 // its derivatives
	expected  float64   // C0 to start from
	zero, one []float64 // imaginary parts and scales of magnitudes
}

// prepare takes the magnitudes, and from the points the samples. scaleUnknown says that the network is not known.
func (m *magnitude) prepare(p *points, sample []float64, scaleUnknown bool) {
	m.settled = forward{points: p}
	m.power.prepare(p)
	m.inner = &m.settled
	if scaleUnknown {
		m.inner = &m.power
	}
	m.sample = append(m.sample[:0], sample...)
	m.zero, m.one, m.slope = grown(m.zero, p.n), grown(m.one, p.n), grown(m.slope, p.n)
	clear(m.zero)
	for i := range m.one {
		m.one[i] = 1
	}
	for i := range p.n {
		p.rawRe[i], p.rawIm[i] = 0, 0
		p.re[i], p.im[i] = -p.openRe[i], -p.openIm[i]
	}
}

// leastOfNoise is the least level told from none, in standard deviations of one part of the noise.
const leastOfNoise = 1e-6

// setNoise sets s and what follows from it.
func (m *magnitude) setNoise(deviation float64) {
	m.deviation = deviation
	m.power.least = leastOfNoise * deviation
	n := len(m.sample)
	m.most, m.least = grown(m.most, n), grown(m.least, n)
	for i, y := range m.sample {
		v := y / deviation
		u := 0.0
		if v*v > 2 {
			u = math.Sqrt(v*v - 1)
			for range 20 {
				_, ratio := bessel(u * v)
				slope := 1 - v*v*(1-ratio/(u*v)-ratio*ratio)
				step := (u - v*ratio) / math.Max(slope, 0.05)
				u = math.Max(u-step, u/4)
				if math.Abs(step) < 1e-12*v {
					break
				}
			}
		}
		log, _ := bessel(u * v)
		m.most[i], m.least[i] = u, (u-v)*(u-v)-2*log
	}
}

func (m *magnitude) parts() int                        { return 1 }
func (m *magnitude) parameters() int                   { return m.inner.parameters() }
func (m *magnitude) inFixture(params []float64) loaded { return m.inner.inFixture(params) }

// start takes a pole of scanPower. In a known network its height gives the loaded resistance where the background is small; C0 is the expected one, or what the
// background can be if the network is one of transmission.
func (m *magnitude) start(q pole, out []float64) {
	if m.inner == problem(&m.power) {
		m.power.start(q, out)
		return
	}
	clear(out)
	p := m.settled.points
	i := p.nearest(q.centreHz)
	background := math.Max(real(q.background), 0)
	height := math.Sqrt(math.Max(real(q.residue)+background, 1e-6*background))
	c0 := m.expected
	if c0 == 0 {
		c0 = math.Sqrt(background) / p.scale[i] / p.angular[i]
	}
	const least = 0.02
	loaded := p.scale[i] / math.Max(height, math.SmallestNonzeroFloat64)
	l1 := loaded / (4 * math.Pi * q.halfHz)
	out[ResonanceHz] = q.centreHz
	out[LogResistance] = math.Log(math.Max(loaded-p.sourceRe[i], least*loaded))
	out[LogInductance] = math.Log(l1)
	out[ShuntCapacitanceFarad] = c0
}

// project turns changes of the inner model's residuals, given as pairs, into changes of this one's, in place: the part along T.
func (m *magnitude) project(shift []float64) {
	for i, slope := range m.slope {
		re, im := m.residual[2*i], m.residual[2*i+1]
		shift[i] = slope * (shift[2*i]*re + shift[2*i+1]*im) / math.Max(math.Hypot(re, im), math.SmallestNonzeroFloat64)
	}
}

// Evaluate is that of a leastsquares.Model, with one residual a point.
func (m *magnitude) Evaluate(params, residual, jacobian []float64) {
	n, k := len(m.sample), len(params)
	m.residual = grown(m.residual, 2*n)
	var inner []float64
	if jacobian != nil {
		m.jacobian = grown(m.jacobian, 2*n*k)
		inner = m.jacobian
	}
	m.inner.Evaluate(params, m.residual, inner)
	s := m.deviation
	for i, y := range m.sample {
		re, im := m.residual[2*i], m.residual[2*i+1]
		length := math.Hypot(re, im)
		u, v := length/s, y/s
		log, ratio := bessel(u * v)
		var r, slope float64
		if away := u - m.most[i]; m.most[i] > 0 && math.Abs(away) < 1e-4 {
			// The root of a difference of nothing: its first-order form.
			x := u * v
			slope = math.Sqrt(math.Max(1-v*v*(1-ratio/x-ratio*ratio), 0))
			r = away * slope
		} else {
			r = math.Copysign(math.Sqrt(math.Max((u-v)*(u-v)-2*log-m.least[i], 0)), away)
			if r != 0 {
				slope = (u - v*ratio) / r
			}
		}
		residual[i] = s * r
		m.slope[i] = slope
		if jacobian == nil {
			continue
		}
		var byRe, byIm float64
		if length > 0 {
			byRe, byIm = slope*re/length, slope*im/length
		}
		for c := range k {
			jacobian[c*n+i] = byRe*inner[2*(c*n+i)] + byIm*inner[2*(c*n+i)+1]
		}
	}
}

// level replaces what a null of magnitudes has by least squares with what the Rice distribution makes of it: the level without the bias of
// the noise, and the sums of squares of the same kind of residual as that of the resonance. The level is looked for in steps around the
// mean, down to nothing.
func (m *magnitude) level(z *null, wild func(int) bool, x func(int) float64) {
	sum := func(level, slope float64) float64 {
		var total float64
		for i, y := range m.sample {
			if !wild(i) {
				r := m.deviance(i, math.Max(level+slope*x(i), 0)/m.deviation, y/m.deviation)
				total += m.deviation * m.deviation * r
			}
		}
		return total
	}
	mean, slope := real(z.value), real(z.slope)
	best := mean
	z.sumOfSquares, z.constant = sum(mean, slope), sum(mean, 0)
	const steps = 16
	for k := range steps {
		level := mean * float64(k) / steps
		if s := sum(level, 0); s < z.constant {
			z.constant, best = s, level
		}
		if s := sum(level, slope*float64(k)/steps); s < z.sumOfSquares {
			z.sumOfSquares = s
		}
	}
	z.sumOfSquares = math.Min(z.sumOfSquares, z.constant)
	z.value = complex(best, 0)
}

// deviance returns D at u for a sample v, both in standard deviations of one part.
func (m *magnitude) deviance(i int, u, v float64) float64 {
	log, _ := bessel(u * v)
	return math.Max((u-v)*(u-v)-2*log-m.least[i], 0)
}

// startMagnitude looks for the resonance of magnitude-only samples and leaves the best solution in f.best and in the workspace.
func (f *Fitter) startMagnitude() bool {
	m := &f.magnitude
	m.prepare(&f.points, f.request.Sweep.Re, f.request.ScaleUnknown)
	f.forward, f.shape = forward{points: &f.points}, shape{points: &f.points} // of no earlier sweep
	m.expected = f.request.Expected.ShuntCapacitanceFarad
	f.problem = m
	f.best = solution{}
	known := f.request.NoiseRMS / math.Sqrt2
	m.setNoise(math.Max(f.floor, known))
	if known == 0 {
		m.setNoise(math.Max(f.floor, f.roughness(func(y float64) float64 { return y })))
	}
	f.tried.n, f.list.n = 0, 0
	f.plane.scanPower(&f.list, m.sample, f.expectedHalfHz())
	noise := f.roughness(func(y float64) float64 { return y * y })
	convinced := false
	for i := 0; i < f.list.n && !convinced; i++ {
		if f.list.gain[i] > leastMatch*noise*noise {
			convinced = f.attemptPole(f.list.pole[i])
		}
	}
	if !convinced && !f.choose() {
		return false
	}
	// Without an instrument's figure the noise is what is left. It matters near the floor only, and two rounds settle it.
	for range 2 {
		if known > 0 {
			break
		}
		m.setNoise(math.Max(f.floor, f.seen.rms))
		threshold := 0.0
		if f.best.robust {
			threshold = f.huberThreshold(f.seen.typical)
		}
		if !f.solve(&f.best, threshold, finalIterations) {
			return false
		}
	}
	return true
}

// roughness returns the standard deviation of a function of the magnitudes from its second differences, half of which no resonance can raise.
func (f *Fitter) roughness(of func(float64) float64) float64 {
	y := f.magnitude.sample
	f.scratch = grown(f.scratch, len(y)-2)
	for i := range f.scratch {
		f.scratch[i] = math.Abs(of(y[i]) - 2*of(y[i+1]) + of(y[i+2]))
	}
	return median(f.scratch) / math.Sqrt(6) / medianOfReal
}

// scanPower is scan for magnitudes. The square of a resonance on a background is
//
//	|b + a/(1 + jt)|^2 = |b|^2 + c/(1 + t^2) + d t/(1 + t^2),    c = |a|^2 + 2 Re(a conj b),  d = 2 Im(a conj b)
//
// and so linear in three numbers at a given centre and width. A pole of the list holds c + jd as its residue and |b|^2 as its background.
func (q *plane) scanPower(list *peaks, sample []float64, expectedHalfHz float64) {
	low, high := math.Inf(1), math.Inf(-1)
	for _, d := range q.offsetHz {
		low, high = math.Min(low, d), math.Max(high, d)
	}
	step := (high - low) / float64(len(sample)-1)
	narrowest, widest := 0.4*step, high-low
	if expectedHalfHz > 0 {
		narrowest = math.Max(narrowest, expectedHalfHz/(scanExpectation*scanExpectation))
		widest = math.Max(narrowest, math.Min(2*widest, expectedHalfHz*scanExpectation*scanExpectation))
	}
	for half := widest; half >= narrowest*0.99; half /= scanWidthStep {
		stride := 1 + int(half/step/scanDensity)
		for centre := low - 2*half; centre <= high+2*half; centre += 2 * scanSpacing * half {
			from, to := q.window(centre-2*scanWindow*half, centre+2*scanWindow*half)
			if found, gain := matchPower(q.offsetHz[from:to], sample[from:to], centre, half, stride); gain > 0 {
				list.add(found, gain)
			}
		}
	}
}

// matchPower fits the three numbers to the squares and returns them with the sum of squares that the resonance takes off.
func matchPower(offsetHz, sample []float64, centreHz, halfHz float64, stride int) (pole, float64) {
	n := len(sample)
	if n < 6 {
		return pole{}, 0
	}
	var s, sa, sb, saa, sab, sbb, sy, say, sby float64
	for i := 0; i < n; i += stride {
		t := (offsetHz[i] - centreHz) / halfHz
		a := 1 / (1 + t*t)
		b := t * a
		y := sample[i] * sample[i]
		s++
		sa += a
		sb += b
		saa += a * a
		sab += a * b
		sbb += b * b
		sy += y
		say += a * y
		sby += b * y
	}
	// About the means.
	caa, cab, cbb, cay, cby := saa-sa*sa/s, sab-sa*sb/s, sbb-sb*sb/s, say-sa*sy/s, sby-sb*sy/s
	determinant := caa*cbb - cab*cab
	if !(determinant > 1e-9*caa*cbb) {
		return pole{}, 0
	}
	c, d := (cbb*cay-cab*cby)/determinant, (caa*cby-cab*cay)/determinant
	return pole{centreHz: centreHz, halfHz: halfHz, residue: complex(c, d), background: complex((sy-c*sa-d*sb)/s, 0)},
		(c*cay + d*cby) * float64(stride)
}
