package spice

import (
	"math"
	"testing"

	"example.com/admit/service/network"
)

// TestShortTransmission holds the runner against the published transmission of the pi-network with a short in the crystal place.
func TestShortTransmission(t *testing.T) {
	got := Sweep(t, Network(network.PiNetwork), Short("a", "b"), 1e6, 2e6, 11)
	const want = 0.0332843987468 // circuit analysis of 159 / 66.2 / 14.2 ohm a side, resistor values from memory
	if len(got) != 11 {
		t.Fatalf("%d points, want 11", len(got))
	}
	for _, p := range got {
		if math.Abs(p.Re-want) > 1e-9 || math.Abs(p.Im) > 1e-9 {
			t.Errorf("S21 = %v %+vj at %v Hz, want %v", p.Re, p.Im, p.FrequencyHz, want)
		}
	}
}
