package resonance

import "math"

// residuals is what the differences between samples and model say of the noise and of the model.
type residuals struct {
	parts        int     // of one residual: 2 for complex samples, 1 for magnitudes
	typical      float64 // root mean square length of one complex residual, from the median: wild points do not move it
	rms          float64 // the same from the mean square, wild points left out
	sumOfSquares float64 // wild points left out
	wild         int     // points further than wildLength that stand alone
	points       int     // the others
	clustered    bool    // there were points so far off, but they stood together: the model is wrong there
	limit        float64 // square of the longest residual among those
	correlation  float64 // lag-1 correlation of the complex residual in measuring order, wild points left out
	memory       float64 // sum of the correlations at all lags, 1 + 2 (rho1 + rho2 + ...), at least 1
}

const (
	// A wild point is further from the model than this many times the typical length. A complex normal residual is so with the
	// probability exp(-25).
	wildLength = 5.0

	// mostWild is the share of the points up to which they are called wild.
	mostWild = 0.05

	// The median length of normal noise of unit mean square: sqrt(ln 2) where it is complex, the quartile of the normal distribution where not.
	medianOfComplex = 0.8325546111576977
	medianOfReal    = 0.6744897501960817

	// longestLag bounds the sum of correlations.
	longestLag = 50
)

// look examines residuals given as pairs of real and imaginary part, in measuring order. A residual no longer than floor, the rounding of
// the samples, is never wild. Residuals of one part come with an imaginary part of 0. scratch is used as working space and returned,
// grown if it had to.
func (r *residuals) look(pairs []float64, parts int, scratch []float64, floor float64) []float64 {
	r.parts = parts
	medianOfNoise := medianOfComplex
	if parts == 1 {
		medianOfNoise = medianOfReal
	}
	n := len(pairs) / 2
	scratch = grown(scratch, n)
	for i := range n {
		scratch[i] = pairs[2*i]*pairs[2*i] + pairs[2*i+1]*pairs[2*i+1]
	}
	r.typical = math.Sqrt(median(scratch)) / medianOfNoise
	r.typical = math.Max(r.typical, floor/wildLength)
	limit := wildLength * r.typical
	limit *= limit
	// Count the wild points, and those that follow another.
	r.wild, r.clustered = 0, false
	clustered, before := 0, false
	for i := range n {
		wild := pairs[2*i]*pairs[2*i]+pairs[2*i+1]*pairs[2*i+1] > limit
		if wild {
			r.wild++
			if before {
				clustered++
			}
		}
		before = wild
	}
	// Wild points stand alone. Where the model is wrong, neighbours are wrong together and all of them count.
	if share := float64(r.wild) / float64(n); share > mostWild || float64(clustered) > 2+4*share*float64(r.wild) {
		r.wild, limit, r.clustered = 0, math.Inf(1), true
	}
	r.limit = limit
	r.sumOfSquares = 0
	var lag float64
	kept := 0
	before = false // the point before is kept
	for i := range n {
		x, y := pairs[2*i], pairs[2*i+1]
		square := x*x + y*y
		keep := square <= limit
		if keep {
			r.sumOfSquares += square
			if before {
				lag += x*pairs[2*i-2] + y*pairs[2*i-1]
				kept++
			}
		}
		before = keep
	}
	r.points = n - r.wild
	r.correlation, r.memory = 0, 1
	if r.points == 0 || r.sumOfSquares == 0 {
		r.rms = 0
		return scratch
	}
	mean := r.sumOfSquares / float64(r.points)
	r.rms = math.Sqrt(mean)
	if kept > 0 {
		r.correlation = lag / float64(kept) / mean
	}
	return scratch
}

// accumulate sums the correlations at all lags until they no longer rise above their own scatter. It is called only where the
// correlation at lag 1 is significant, since the sum is noisy.
func (r *residuals) accumulate(pairs []float64) {
	n := len(pairs) / 2
	limit := r.limit
	scatter := 1 / math.Sqrt(float64(r.parts*n))
	r.memory = 1
	for lag := 1; lag <= longestLag && lag < n/4; lag++ {
		var sum float64
		kept := 0
		for i := lag; i < n; i++ {
			a, b := pairs[2*i], pairs[2*i+1]
			c, d := pairs[2*(i-lag)], pairs[2*(i-lag)+1]
			if a*a+b*b > limit || c*c+d*d > limit {
				continue
			}
			sum += a*c + b*d
			kept++
		}
		if kept == 0 {
			break
		}
		rho := sum / float64(kept) / (r.rms * r.rms)
		if rho < 2*scatter {
			break
		}
		r.memory += 2 * rho
	}
}

// blocks returns the variance of the means of blocks of neighbouring points over what it is for white noise, 1 + 2 (rho1 + rho2 + ...) as far as a
// block reaches, or 1 if that is within the scatter of white noise. It sees what lag 1 does not: a residual far below the noise
// of a point that goes the same way over many.
func (r *residuals) blocks(pairs []float64, length int) float64 {
	const deviations = 3.5
	n := len(pairs) / 2
	count := n / max(length, 1)
	if length < 2 || count < 4 || r.rms == 0 {
		return 1
	}
	var sum float64
	used := 0
	for b := range count {
		var re, im float64
		kept := 0
		for i := b * length; i < (b+1)*length; i++ {
			x, y := pairs[2*i], pairs[2*i+1]
			if x*x+y*y <= r.limit {
				re += x
				im += y
				kept++
			}
		}
		if kept > 0 {
			sum += (re*re + im*im) / float64(kept)
			used++
		}
	}
	ratio := sum / float64(used) / (r.rms * r.rms)
	if ratio < 1+deviations*math.Sqrt(2/float64(r.parts*used)) {
		return 1
	}
	return ratio
}

// scatter is the lag-1 correlation that white noise stays below: five of its standard deviations, 1/sqrt(2 n) for n complex points; four are met
// once in thirty thousand sweeps.
func (r *residuals) scatter() float64 { return 5 / math.Sqrt(float64(r.parts*max(r.points, 1))) }

// noise returns the root mean square as that of a complex sample, of which a magnitude shows one part.
func (r *residuals) noise() float64 { return r.rms * math.Sqrt(2/float64(r.parts)) }

// gain returns the log-likelihood ratio, twice, of two sums of squares over the points.
func (r *residuals) gain(before, after float64) float64 {
	if !(after > 0) {
		after = math.SmallestNonzeroFloat64
	}
	return float64(r.parts*r.points) * math.Log(before/after)
}

// significant says whether the lag-1 correlation is beyond the scatter of white noise.
func (r *residuals) significant() bool { return r.correlation > r.scatter() }

// systematic is the part of the residual that is not noise: the length whose square is the part common to neighbouring points, beyond
// what white noise shows by chance.
func (r *residuals) systematic() float64 {
	return r.rms * math.Sqrt(math.Max(r.correlation-r.scatter(), 0))
}

// median returns the median of values, which it reorders.
func median(values []float64) float64 { return ranked(values, len(values)/2) }

// ranked returns the value that k others are below, k from 0, and reorders values so that it stands at place k. Quickselect with the
// middle of three as pivot.
func ranked(values []float64, k int) float64 {
	if len(values) == 0 {
		return 0
	}
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
