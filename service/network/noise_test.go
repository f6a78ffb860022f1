package network

import (
	"math"
	"testing"
	"time"

	"example.com/admit/service/sweep"
)

func TestSampleNoise(t *testing.T) {
	p0, p := -2.0, -22.0
	stated := &ReceiverNoise{RMS: 4e-6, SourcePowerDBm: &p0, Averaging: time.Millisecond}
	solved := []Standard{{Kind: Open}}
	for _, test := range []struct {
		name string
		c    *Calibration
		s    sweep.Sweep
		want float64
	}{
		{"no calibration", nil, sweep.Sweep{Quantity: sweep.S21}, 0},
		{"no noise stated", &Calibration{}, sweep.Sweep{Quantity: sweep.S21}, 0},
		{"nothing stated of the sweep", &Calibration{ReceiverNoise: stated}, sweep.Sweep{Quantity: sweep.S21}, 4e-6},
		{"20 dB less power is ten times the noise of a ratio", &Calibration{ReceiverNoise: stated}, sweep.Sweep{Quantity: sweep.S21, SourcePowerDBm: &p}, 4e-5},
		{"four times the averaging is half the noise", &Calibration{ReceiverNoise: stated},
			sweep.Sweep{Quantity: sweep.S21, Timing: sweep.Timing{Dwell: 10 * time.Millisecond, Averaging: 4 * time.Millisecond}}, 2e-6},
		{"no averaging is the whole dwell", &Calibration{ReceiverNoise: stated}, sweep.Sweep{Quantity: sweep.S11, Timing: sweep.Timing{Dwell: 16 * time.Millisecond}}, 1e-6},
		{"no figures of the noise", &Calibration{ReceiverNoise: &ReceiverNoise{RMS: 4e-6}},
			sweep.Sweep{Quantity: sweep.S21, SourcePowerDBm: &p, Timing: sweep.Timing{Dwell: time.Second}}, 4e-6},
		{"somebody else's correction", &Calibration{ReceiverNoise: stated, Standards: solved}, sweep.Sweep{Quantity: sweep.Impedance}, 0},
		{"an instrument that reads siemens", &Calibration{ReceiverNoise: stated}, sweep.Sweep{Quantity: sweep.Admittance}, 4e-6},
	} {
		if got := SampleNoise(test.c, &test.s); math.Abs(got-test.want) > 1e-12*test.want {
			t.Errorf("%s: %g, want %g", test.name, got, test.want)
		}
	}
}

func TestReferenceClock(t *testing.T) {
	c := &Calibration{ReferenceClockOffsetPPM: -0.5}
	if got := c.TrueFrequencyHz(10e6); math.Abs(got-9999995) > 1e-9 {
		t.Errorf("10 MHz on a clock 0.5 ppm slow is %.9g Hz", got)
	}
}
