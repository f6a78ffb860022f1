package network

import (
	"errors"
	"math"
	"math/cmplx"
	"testing"

	"example.com/admit/service/crystal"
	"example.com/admit/service/sweep"
	"pgregory.net/rapid"
)

// TestDriveTransferOfCircuits holds Vth = E sqrt(Ts Zt/(2 Z0)) for any symmetric resistive network, not only those of the kinds.
func TestDriveTransferOfCircuits(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		ohm := rapid.Float64Range(1, 1e4)
		c := Circuit{
			ReferenceImpedanceOhm: rapid.Float64Range(10, 100).Draw(t, "Z0"),
			PortShuntOhm:          ohm.Draw(t, "port"), SeriesOhm: ohm.Draw(t, "series"), UnitShuntOhm: ohm.Draw(t, "unit"),
		}
		want := math.Sqrt(c.ShortTransmission() * c.TerminationOhm() / (2 * c.ReferenceImpedanceOhm))
		if got := c.OpenVoltagePerEMF(); math.Abs(got/want-1) > 1e-12 {
			t.Errorf("%+v: %.15g V/V by analysis, %.15g by the formula", c, got, want)
		}
	})
}

func TestDriveLevels(t *testing.T) {
	c := &Calibration{Network: PiNetwork, SourceLevelOffsetDB: -1, SourceLevelUncertaintyDB: 0.1}
	d, err := c.Drive()
	if err != nil {
		t.Fatal(err)
	}
	// The source is 1 dB weaker than it says: the stated power must be 1 dB above what the reference table asks for 10 uW in 25 ohm.
	if got := d.SourcePowerDBm(10e-6, 25); math.Abs(got-(-2.2121072+1)) > 2e-3 {
		t.Errorf("10 uW in 25 ohm takes %g dBm stated", got)
	}
	if got := d.PowerAtResonanceWatt(d.SourcePowerDBm(3e-6, 40), 40); math.Abs(got/3e-6-1) > 1e-12 {
		t.Errorf("3 uW asked for in 40 ohm, %g W given", got)
	}
	if got := d.RelativePowerUncertainty(); math.Abs(got-0.023026) > 1e-6 {
		t.Errorf("0.1 dB is %g of the power", got)
	}
	for _, test := range []struct{ low, high, at float64 }{{5, 100, 25}, {30, 100, 30}, {1, 10, 10}} {
		watt, at := d.WorstPowerWatt(0, test.low, test.high)
		if at != test.at {
			t.Errorf("R1 %g to %g ohm: worst at %g ohm, want %g", test.low, test.high, at, test.at)
		}
		for r := test.low; r <= test.high; r += 0.5 {
			if p := d.PowerAtResonanceWatt(0, r); p > watt*(1+1e-12) {
				t.Errorf("%g ohm takes %g W, more than the worst %g W", r, p, watt)
			}
		}
	}
	if _, err := (&Calibration{Network: Unknown}).Drive(); !errors.Is(err, ErrUnknownNetwork) {
		t.Errorf("drive of an unknown network: %v", err)
	}
}

// TestHighestPower looks for the highest sample: at resonance, with the termination of the terms where there are any.
func TestHighestPower(t *testing.T) {
	f := plainFixture()
	f.zt, f.ztSlope = 28, 0
	x := f.frequencies(1001, 0.1)
	c := f.calibration(standards(PiNetwork)[:3], f.frequencies(11, 1))
	solved, err := Solve(c)
	if err != nil {
		t.Fatal(err)
	}
	var terms Terms
	if err := solved.Terms(&terms, x, sweep.S21); err != nil {
		t.Fatal(err)
	}
	d, err := c.Drive()
	if err != nil {
		t.Fatal(err)
	}
	unit := crystal.Unit{Modes: []crystal.Mode{crystal.ModeFromCapacitance(25e6, 18, 5.5e-15)}, ShuntCapacitanceFarad: 1.6e-12}
	dbm := -10.0
	s := &sweep.Sweep{FrequencyHz: x, SourcePowerDBm: &dbm, Quantity: sweep.S21}
	watt, point, err := d.HighestPowerWatt(s, &terms, unit)
	if err != nil {
		t.Fatal(err)
	}
	ideal := math.Pow(d.OpenVoltage(dbm)/(18+28), 2) * 18
	if x[point] < 25e6-20 || x[point] > 25e6+20 || math.Abs(watt/ideal-1) > 1e-3 {
		t.Errorf("highest power %g W at %g Hz, want about %g W at resonance", watt, x[point], ideal)
	}
	nominal, _, err := d.HighestPowerWatt(s, nil, unit)
	if want := math.Pow(d.OpenVoltage(dbm)/(18+25), 2) * 18; err != nil || math.Abs(nominal/want-1) > 1e-3 {
		t.Errorf("with the nominal termination %g W, want about %g W (%v)", nominal, want, err)
	}
	s.SourcePowerDBm = nil
	if _, _, err := d.HighestPowerWatt(s, &terms, unit); err == nil {
		t.Error("a sweep without source power has a power in R1")
	}
}

// TestLeadsTakeNoCurrent: a lead inductance moves the voltage, and the motional current follows the whole mesh. Held against a
// node-by-node solution of the same circuit.
func TestLeadsTakeNoCurrent(t *testing.T) {
	d, err := (&Calibration{Network: SeriesThrough}).Drive()
	if err != nil {
		t.Fatal(err)
	}
	unit := crystal.Unit{
		Modes:                 []crystal.Mode{crystal.ModeFromCapacitance(100e6, 48, 0.45e-15), crystal.ModeFromCapacitance(100.01e6, 300, 0.1e-15)},
		ShuntCapacitanceFarad: 3.6e-12, LeadInductanceHenry: 8e-9,
	}
	for _, hz := range []float64{99.99e6, 100e6, 100.0004e6, 100.02e6} {
		w := 2 * math.Pi * hz
		var arms [2]complex128
		for k, m := range unit.Modes {
			arms[k] = complex(m.ResistanceOhm, w*m.InductanceHenry*(1-(m.ResonanceHz/hz)*(m.ResonanceHz/hz)))
		}
		parallel := 1 / (1/arms[0] + 1/arms[1] + complex(0, w*3.6e-12))
		across := complex(d.OpenVoltage(3), 0) * parallel / (100 + complex(0, w*8e-9) + parallel)
		want := square(across/arms[0]) * 48
		if got := d.PowerWatt(3, unit, hz); math.Abs(got/want-1) > 1e-6 {
			t.Errorf("%g W in R1 at %g Hz, the circuit gives %g W", got, hz, want)
		}
	}
}

// TestPiNetworkPorts holds what circuit analysis makes of the resistors beside what the reference rows say.
func TestPiNetworkPorts(t *testing.T) {
	c, _ := PiNetwork.Circuit(50, 25)
	for _, test := range []struct {
		name, source   string
		got, want, tol float64
	}{
		{"port with the unit's place open", "circuit analysis by hand: 159 parallel (66.2 + 14.2)", real(c.InputImpedanceOhm(cmplx.Inf())), 159 * 80.4 / 239.4, 1e-9},
		{"return loss of a port with a short, dB", "circuit analysis, design notes on the pi-network (67.6 dB)",
			-20 * math.Log10(math.Abs(real((c.InputImpedanceOhm(0)-50)/(c.InputImpedanceOhm(0)+50)))), 67.6, 0.05},
		{"25 ohm relative to a short, dB", "the same (-6.0215 dB)", 20 * math.Log10(real(c.Transmission(25)/c.Transmission(0))), -6.0215, 5e-5},
	} {
		if test.source == "" || !(math.Abs(test.got-test.want) <= test.tol) {
			t.Errorf("%s: %.8g, want %.8g (%s)", test.name, test.got, test.want, test.source)
		}
	}
}
