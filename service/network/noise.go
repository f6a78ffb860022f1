package network

import (
	"math"

	"example.com/admit/service/sweep"
)

// SampleNoise returns the complex rms noise of one raw sample of the sweep, E|n|^2 = rms^2, from the receiver noise of the calibration; 0
// means unknown.
//
//	rms = RMS 10^(-(P - P0)/20) sqrt(t0/t)
//
// P is the sweep's source power and t its averaging time (its dwell where it states no averaging); P0 and t0 belong to the receiver noise. A
// factor whose two figures are not both stated is 1. The noise is that of the samples the receiver reads: of a sweep of admittance or
// impedance under a calibration with standards, which somebody else has corrected, it says nothing.
func SampleNoise(c *Calibration, s *sweep.Sweep) float64 {
	if c == nil || c.ReceiverNoise == nil {
		return 0
	}
	if _, corrected := statedTerms(s.Quantity); corrected && len(c.Standards) > 0 {
		return 0
	}
	noise := c.ReceiverNoise
	rms := noise.RMS
	if noise.SourcePowerDBm != nil && s.SourcePowerDBm != nil {
		rms *= math.Pow(10, (*noise.SourcePowerDBm-*s.SourcePowerDBm)/20)
	}
	averaging := s.Timing.Averaging
	if averaging == 0 {
		averaging = s.Timing.Dwell
	}
	if noise.Averaging > 0 && averaging > 0 {
		rms *= math.Sqrt(float64(noise.Averaging) / float64(averaging))
	}
	return rms
}
