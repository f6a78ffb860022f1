package network

import (
	"errors"
	"fmt"
	"strings"

	"example.com/admit/service/sweep"
)

// ErrUnknownNetwork is returned where only the circuit between receiver and unit could give an answer and its kind is Unknown: no
// nominal terms, no power in R1.
var ErrUnknownNetwork = errors.New("the fixture network is unknown")

// UnsupportedError says that a network cannot give samples of a quantity.
type UnsupportedError struct {
	Network  Kind
	Quantity sweep.Quantity
}

func (e *UnsupportedError) Error() string {
	var gives []string
	for _, q := range sweep.Quantities() {
		if e.Network.Gives(q) {
			gives = append(gives, string(q))
		}
	}
	return fmt.Sprintf("network: a fixture network of kind %s gives no %q samples, only %s", e.Network, e.Quantity, strings.Join(gives, ", "))
}

// Gives reports whether a sweep of the quantity can come from this network. Admittance and impedance are referred to the unit's
// contacts by whoever stated them, so any network gives them; an unknown network may give anything.
func (k Kind) Gives(q sweep.Quantity) bool {
	switch q {
	case sweep.Admittance, sweep.Impedance:
		return true
	case sweep.S21, sweep.S21Magnitude:
		return k == PiNetwork || k == SeriesThrough || k == HighImpedance || k == Unknown
	case sweep.S11:
		return k == Reflection || k == Unknown
	}
	return false
}

// constantTerms are terms that do not depend on frequency.
type constantTerms struct {
	a, b, c complex128
	d       float64
}

// statedTerms returns the terms of samples that are the unit's own admittance or impedance; false for any other quantity.
func statedTerms(q sweep.Quantity) (constantTerms, bool) {
	switch q {
	case sweep.Admittance:
		return constantTerms{a: 0, b: 1, c: 0, d: 1}, true
	case sweep.Impedance:
		return constantTerms{a: 1, b: 0, c: 1, d: 0}, true
	}
	return constantTerms{}, false
}

// nominalTerms returns the terms of a network as it is meant to be, for samples that are ratios.
//
//	transmission   T = Ts Zt Y/(1 + Zt Y)             A = 0, B = Ts Zt, C = Zt
//	reflection     T = (1 - Zt Y)/(1 + Zt Y)          A = 1, B = -Zt,   C = Zt
//
// Zt is the nominal termination and Ts the short transmission of the circuit: 0.0332844 for the pi-network, 1 for series-through, where T
// becomes 100/(100 + Z) between 50-ohm ports, and 0.00125 for the high-impedance network.
// Source: circuit analysis; IEC 60444-1 for the pi-network, resistor values from memory.
func nominalTerms(k Kind, referenceImpedanceOhm, terminationOhm float64) (constantTerms, error) {
	zt := complex(terminationOhm, 0)
	if k == Reflection {
		return constantTerms{a: 1, b: -zt, c: zt, d: 1}, nil
	}
	circuit, ok := k.Circuit(referenceImpedanceOhm, terminationOhm)
	if !ok {
		return constantTerms{}, ErrUnknownNetwork
	}
	return constantTerms{a: 0, b: circuit.Transmission(0) * zt, c: zt, d: 1}, nil
}
