package survey_test

import (
	"fmt"
	"math"
	"math/rand/v2"

	"example.com/admit/service/crystal"
	"example.com/admit/service/network"
	"example.com/admit/service/survey"
	"example.com/admit/service/sweep"
)

// A 25 MHz unit with an unwanted mode 40 kHz above its main one, surveyed in the nominal pi-network at station N1.
func Example() {
	unit := crystal.Unit{
		Modes: []crystal.Mode{
			crystal.ModeFromCapacitance(25e6, 18, 5.5e-15),
			crystal.ModeFromCapacitance(25.04e6, 180, 0.6e-15),
		},
		ShuntCapacitanceFarad: 1.6e-12,
	}
	grid := sweep.Grid{StartHz: 24.95e6, StopHz: 25.1e6, Points: 1501}
	s := &sweep.Sweep{Role: sweep.Unwanted, Quantity: sweep.S21, Grid: &grid}
	for i := range grid.Points {
		s.FrequencyHz = append(s.FrequencyHz, grid.At(i))
	}
	solved, err := network.Solve(&network.Calibration{
		Network: network.PiNetwork, ReferenceImpedanceOhm: 50, NominalTerminationOhm: 25, DriftGainDB: 0.02, DriftPhaseDeg: 0.1,
	})
	if err != nil {
		fmt.Println(err)
		return
	}
	var terms network.Terms
	if err := solved.Terms(&terms, s.FrequencyHz, s.Quantity); err != nil {
		fmt.Println(err)
		return
	}
	const noise = 2e-5
	rng := rand.New(rand.NewPCG(1, 2))
	for i, f := range s.FrequencyHz {
		t := terms.Sample(i, unit.Admittance(f))
		s.Re = append(s.Re, real(t)+noise/math.Sqrt2*rng.NormFloat64())
		s.Im = append(s.Im, imag(t)+noise/math.Sqrt2*rng.NormFloat64())
	}

	var surveyor survey.Surveyor
	var result survey.Result
	surveyor.Survey(&survey.Request{
		Sweep: s, Terms: &terms, NoiseRMS: noise,
		Spans: []survey.Span{{FromHz: 25e6, ToHz: 25.1e6, SuppressionDB: 30, Definition: survey.ResistanceRatio}},
	}, &result)
	for _, m := range result.Modes {
		fmt.Printf("%s mode at %.4f MHz, %.0f ohm\n", m.Kind, m.FrequencyHz.Value/1e6, m.ResistanceOhm.Value)
		if m.Kind == survey.UnwantedMode {
			fmt.Printf("suppressed by %.1f dB (%v)\n", m.Suppression[survey.ResistanceRatio].Value, survey.ResistanceRatio)
		}
	}
	o := result.Observability[0]
	fmt.Printf("modes narrower than %.0f Hz were not observable at %.0f dB\n", o.NarrowestWidthHz, o.SuppressionDB)
	// Output:
	// main mode at 25.0000 MHz, 18 ohm
	// unwanted mode at 25.0400 MHz, 180 ohm
	// suppressed by 20.0 dB (resistance-ratio)
	// modes narrower than 7 Hz were not observable at 30 dB
}
