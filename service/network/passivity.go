package network

import (
	"math"

	"example.com/admit/service/sweep"
)

// Passive says how far a sweep's corrected admittances fall below zero conductance, which no passive unit can do.
type Passive struct {
	ConductanceSiemens float64 // mean real part over the worst run of points; negative when the samples are not passive there
	Significance       float64 // how many standard deviations it lies below zero; 0 when no run does
	FirstPoint, Points int     // the run
}

// Passivity looks for the run of neighbouring points (1, 2, 4, ... points long, or the whole sweep) whose mean conductance lies below zero by
// the most standard deviations, noise and systematic influences together: noise averages out over a run, influences do not. A
// significance beyond 5 or so says that calibration and sweep do not belong together.
//
//	s^2(G) = sum w^2 |dY/dT|^2 rms^2/2 + sum over influences of (mean change of G)^2,    w from 1/|dY/dT|^2
//
// noiseRMS is the complex noise of one raw sample (SampleNoise); without it, and without an influence, nothing is known and the
// significance is 0, as it is for magnitudes. Near a short dY/dT grows without bound; such points count as little as they know.
func Passivity(terms *Terms, contributions []Contribution, s *sweep.Sweep, noiseRMS float64) Passive {
	n := s.Points()
	if !s.Quantity.Complex() || n == 0 || (noiseRMS <= 0 && len(contributions) == 0) {
		return Passive{}
	}
	// Sums of weights, of weighted conductance, and of its change under each influence, from the first point to before point i.
	columns := 2 + len(contributions)
	sums := make([]float64, (n+1)*columns)
	for i := range n {
		row, next := sums[i*columns:(i+1)*columns], sums[(i+1)*columns:(i+2)*columns]
		copy(next, row)
		sample := complex(s.Re[i], s.Im[i])
		y := terms.Admittance(i, sample)
		weight := 1 / square(terms.slope(i, sample))
		if !finite(y) || !(weight > 0) || math.IsInf(weight, 1) {
			continue
		}
		next[0] += weight
		next[1] += weight * real(y)
		for k := range contributions {
			next[2+k] += weight * real(contributions[k].Terms.Admittance(i, sample)-y)
		}
	}
	// Differences of sums that hold less than this of the whole are rounding.
	least := 1e-9 * sums[n*columns]
	var worst Passive
	look := func(first, points int) {
		low, high := sums[first*columns:], sums[(first+points)*columns:]
		weight := high[0] - low[0]
		if !(weight > least) {
			return
		}
		variance := noiseRMS * noiseRMS / 2 / weight
		for k := 2; k < columns; k++ {
			d := (high[k] - low[k]) / weight
			variance += d * d
		}
		mean := (high[1] - low[1]) / weight
		if significance := -mean / math.Sqrt(variance); significance > worst.Significance {
			worst = Passive{mean, significance, first, points}
		}
	}
	for points := 1; points < n; points *= 2 {
		for first := 0; first+points <= n; first += max(1, points/2) {
			look(first, points)
		}
	}
	look(0, n)
	return worst
}
