package trial

import (
	"fmt"
	"math"
)

// Reading is what one trial says of one quantity.
type Reading struct {
	Error     float64 // estimate less truth
	Deviation float64 // the standard uncertainty that was stated with it
	Efficient float64 // what an efficient estimator would have been off by; 0 where the bound is not known
}

// coverage95 is the factor of a 95 % interval.
const coverage95 = 1.959963984540054

// Spread is how the errors of one quantity are distributed.
//
// With n trials a standard deviation is known to 1/sqrt(2n) of itself only: 2 % with a thousand, so that among hundreds of cells some would
// leave narrow limits by chance. Where the error of an efficient estimator is known for the very same noise, whose variance is the
// bound exactly, it serves as a control variate:
//
//	variance = bound^2 + mean of (error^2 - efficient^2),   mean = mean of (error - efficient),   coverage = 95 % + mean of (covered - covered by efficient)
//
// These are unbiased whatever the estimator, and as sharp as it is close to the efficient one. Plain are the same figures without.
type Spread struct {
	Trials                                  int
	Ratio, Bias, Coverage                   float64 // sd over bound; mean over sd; share of 95 % intervals that cover the truth
	PlainRatio, PlainBias, PlainCoverage    float64
	MeanError, RootMeanSquare, MedianHalf95 float64 // in the unit of the quantity; the last is the median half-width of the intervals
}

// SpreadOf returns the spread of the readings about a bound, in the unit of the quantity. Without a bound (0) the ratios are to the readings'
// own standard deviation, hence 1.
func SpreadOf(readings []Reading, bound float64) Spread {
	n := float64(len(readings))
	s := Spread{Trials: len(readings)}
	var sum, square, efficient, efficientSquare, covered, efficientCovered float64
	halves := make([]float64, 0, len(readings))
	for _, r := range readings {
		sum += r.Error
		square += r.Error * r.Error
		efficient += r.Efficient
		efficientSquare += r.Efficient * r.Efficient
		if math.Abs(r.Error) <= coverage95*r.Deviation {
			covered++
		}
		if math.Abs(r.Efficient) <= coverage95*bound {
			efficientCovered++
		}
		halves = append(halves, coverage95*r.Deviation)
	}
	s.MeanError, s.RootMeanSquare, s.MedianHalf95 = sum/n, math.Sqrt(square/n), Quantile(halves, 0.5)
	plain := math.Sqrt(math.Max(square/n-sum/n*sum/n, 0))
	s.PlainCoverage = covered / n
	if bound == 0 {
		bound = plain
	}
	s.PlainRatio, s.PlainBias = plain/bound, sum/n/bound
	s.Ratio, s.Bias, s.Coverage = s.PlainRatio, s.PlainBias, s.PlainCoverage
	if efficientSquare > 0 {
		bias := (sum - efficient) / n
		variance := bound*bound + (square-efficientSquare)/n - bias*bias
		s.Ratio, s.Bias = math.Sqrt(math.Max(variance, 0))/bound, bias/bound
		s.Coverage = 0.95 + (covered-efficientCovered)/n
	}
	return s
}

// Gate is what a spread must keep.
type Gate struct {
	LeastRatio, MostRatio       float64
	MostBias                    float64 // in standard deviations
	LeastCoverage, MostCoverage float64
}

// The gates of the proofs: Full for 10 000 trials a cell, Quick for 1000.
var (
	Full  = Gate{0.95, 1.05, 0.1, 0.94, 0.96}
	Quick = Gate{0.91, 1.09, 0.1, 0.92, 0.98}
)

// plainTrials is from how many trials on the plain standard deviation is sharp enough for gates of 5 %: seven of its own standard errors.
const plainTrials = 10000

// Check returns what the spread breaks, "" if nothing.
func (g Gate) Check(s Spread) string {
	switch {
	case !(s.Ratio >= g.LeastRatio && s.Ratio <= g.MostRatio):
		return fmt.Sprintf("sd/bound %.3f, want %.2f..%.2f", s.Ratio, g.LeastRatio, g.MostRatio)
	case s.Trials >= plainTrials && !(s.PlainRatio >= g.LeastRatio && s.PlainRatio <= g.MostRatio):
		return fmt.Sprintf("sd/bound %.3f without the control variate, want %.2f..%.2f", s.PlainRatio, g.LeastRatio, g.MostRatio)
	case s.Trials >= plainTrials && !(math.Abs(s.PlainBias) < g.MostBias):
		return fmt.Sprintf("bias %+.3f sd without the control variate, want below %.2f", s.PlainBias, g.MostBias)
	case !(math.Abs(s.Bias) < g.MostBias):
		return fmt.Sprintf("bias %+.3f sd, want below %.2f", s.Bias, g.MostBias)
	case !(s.Coverage >= g.LeastCoverage && s.Coverage <= g.MostCoverage):
		return fmt.Sprintf("the 95 %% interval covers %.2f %%, want %.0f..%.0f %%", 100*s.Coverage, 100*g.LeastCoverage, 100*g.MostCoverage)
	}
	return ""
}
