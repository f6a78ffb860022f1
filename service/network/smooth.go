package network

import "math"

// Noise of the readings of a standard goes into every unit measured afterwards, and is the same for all of them. Averaging it over a
// smooth trace is the cheapest accuracy there is, so the rule is: a standard's samples, its mean delay taken out, are replaced by a
// polynomial in frequency whenever one of degree 12 or less leaves nothing but noise. "Nothing but noise" is read off the data
// themselves, at the highest degree allowed (n/6, at most 12): the residual has no lag-1 correlation beyond 3 sigma, which tells on long
// traces, and its fourth differences are as rough as noise makes them, within a factor of 3 in power, which tells on short ones. The
// degree then taken is one more than the last whose coefficient stands out of that noise, and at least 2: what lies just below the
// noise would otherwise be an error that nobody counts. Where the receiver's noise is stated, the residual must not exceed it threefold
// either. A trace that fails, above all one without noise, is interpolated as it was read. What passes unseen is a ripple of many turns
// below a third of the noise of one reading.
const (
	highestDegree      = 12
	pointsPerDegree    = 6
	leastRoughness     = 1. / 3
	leastDegree        = 2
	largestNoise       = 3 // times the stated one
	coefficientOutlier = 8 // times the noise variance: a noise coefficient exceeds it once in exp(8), 3000
)

// polynomial is a least-squares polynomial on n frequencies in the basis that is orthonormal on just these: q0 = 1/sqrt(n) and
// b[k+1] q[k+1] = (x - a[k]) q[k] - b[k] q[k-1], x from -1 to 1 over the band.
// Source: Forsythe, Generation and use of orthogonal polynomials for data-fitting with a digital computer, 1957 (recurrence from memory).
type polynomial struct {
	centreHz, halfHz float64
	first            float64 // q0
	a, b             []float64
	coefficient      []complex128
	noise            float64 // complex rms of one reading, as the residual says
}

// fitPolynomial returns the polynomial of the rule above, or false when the samples should be left as they are. receiverNoise is the
// stated complex rms noise of one sample, 0 when it is not known.
func fitPolynomial(x []float64, values []complex128, receiverNoise float64) (*polynomial, bool) {
	n := len(x)
	degrees := min(highestDegree, n/pointsPerDegree)
	if degrees < leastDegree {
		return nil, false
	}
	p := &polynomial{centreHz: (x[0] + x[n-1]) / 2, halfHz: (x[n-1] - x[0]) / 2, first: 1 / math.Sqrt(float64(n))}
	residual := append([]complex128(nil), values...)
	previous, current := make([]float64, n), make([]float64, n)
	for i := range current {
		current[i] = p.first
	}
	back := 0.0
	for degree := 0; ; degree++ {
		var c complex128
		for i, q := range current {
			c += complex(q, 0) * residual[i]
		}
		for i, q := range current {
			residual[i] -= complex(q, 0) * c
		}
		p.coefficient = append(p.coefficient, c)
		if degree == degrees {
			break
		}
		var centre, norm float64
		for i, q := range current {
			centre += p.scaled(x[i]) * q * q
		}
		for i, q := range current {
			next := (p.scaled(x[i])-centre)*q - back*previous[i]
			previous[i], current[i] = q, next
			norm += next * next
		}
		back = math.Sqrt(norm)
		for i := range current {
			current[i] /= back
		}
		p.a, p.b = append(p.a, centre), append(p.b, back)
	}
	if !white(residual) {
		return nil, false
	}
	sum := 0.0
	for _, r := range residual {
		sum += square(r)
	}
	variance := sum / float64(n-degrees-1)
	p.noise = math.Sqrt(variance)
	if receiverNoise > 0 && p.noise > largestNoise*receiverNoise {
		return nil, false
	}
	keep := degrees
	for keep > 0 && square(p.coefficient[keep]) < coefficientOutlier*variance {
		keep--
	}
	p.coefficient = p.coefficient[:min(max(keep+1, leastDegree), degrees)+1]
	return p, true
}

// white says whether a residual passes for noise. Fourth differences of white noise have 1 + 16 + 36 + 16 + 1 = 70 times its variance.
func white(r []complex128) bool {
	n := float64(len(r))
	var sum, lagged, rough float64
	for i := range r {
		sum += square(r[i])
		if i >= 1 {
			lagged += real(r[i])*real(r[i-1]) + imag(r[i])*imag(r[i-1])
		}
		if i >= 4 {
			rough += square(r[i] - 4*r[i-1] + 6*r[i-2] - 4*r[i-3] + r[i-4])
		}
	}
	return lagged <= 3/math.Sqrt(2*n)*sum && rough/70/(n-4) >= leastRoughness*sum/n
}

func (p *polynomial) scaled(f float64) float64 { return (f - p.centreHz) / p.halfHz }

// at returns the polynomial at a frequency, and the share of one reading's noise variance that is left in it there.
func (p *polynomial) at(f float64) (value complex128, leverage float64) {
	x := p.scaled(f)
	previous, current, back := 0.0, p.first, 0.0
	for k, c := range p.coefficient {
		value += complex(current, 0) * c
		leverage += current * current
		if k+1 < len(p.coefficient) {
			next := ((x-p.a[k])*current - back*previous) / p.b[k]
			previous, current, back = current, next, p.b[k]
		}
	}
	return value, leverage
}

// roughNoise estimates the complex rms noise of readings that follow no polynomial, from the median of their squared third differences:
// E|d3|^2 = 20 s^2, and the median of an exponential is ln 2 times its mean. Curvature can only make it larger. Zero below 8 points.
func roughNoise(values []complex128) float64 {
	if len(values) < 8 {
		return 0
	}
	squares := make([]float64, 0, len(values))
	for i := 3; i < len(values); i++ {
		squares = append(squares, square(values[i]-3*values[i-1]+3*values[i-2]-values[i-3]))
	}
	return math.Sqrt(median(squares) / (20 * math.Ln2))
}
