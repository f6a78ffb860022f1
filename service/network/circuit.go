package network

import (
	"math"
	"math/cmplx"
)

// Resistors of the pi-network, each side: recalled from the IEC 60444-1 family, no open text prints them. That they are meant is
// shown by what circuit analysis makes of them: 50 ohm at the port, 12.4975 ohm at the unit.
const (
	piPortShuntOhm = 159
	piSeriesOhm    = 66.2
	piUnitShuntOhm = 14.2
)

// Circuit is a symmetric resistive fixture network between two ports of one reference impedance: on each side a shunt at the port, a
// series resistor, and a shunt at the unit. A shunt of 0 ohm is not there.
//
//	port o--+---[series]---+--[ unit ]--+---[series]---+--o port
//	        |              |            |              |
//	   [port shunt]   [unit shunt] [unit shunt]   [port shunt]
type Circuit struct {
	ReferenceImpedanceOhm                 float64
	PortShuntOhm, SeriesOhm, UnitShuntOhm float64
}

// Circuit returns the network of this kind as its resistors make it, between ports of the given reference impedance; false for kinds that
// are not of this form (reflection, unknown).
//
// pi-network: 159, 66.2 and 14.2 ohm. Its termination follows from them (24.995 ohm between 50-ohm ports), whatever is stated.
//
// series-through: nothing but the ports, so that the unit sees 2 Z0.
//
// high-impedance, ours, for tuning forks: a shunt of Z0 at each port, so that a port sees its match, and a series resistor that
// makes the termination the stated one, RT - Z0/2 each side. For Z0 = 50 ohm and 2RT = 20 kohm that is 50 ohm and 9975 ohm; the source side
// is then half of the EMF behind 10 kohm, and the receiver on the far side reads the unit's current through 25 ohm: a short gives
// Z0/(2 * 2RT) = 0.00125 (-58.06 dB). A termination below Z0 leaves no series resistor and is taken as Z0.
func (k Kind) Circuit(referenceImpedanceOhm, terminationOhm float64) (Circuit, bool) {
	c := Circuit{ReferenceImpedanceOhm: referenceImpedanceOhm}
	switch k {
	case PiNetwork:
		c.PortShuntOhm, c.SeriesOhm, c.UnitShuntOhm = piPortShuntOhm, piSeriesOhm, piUnitShuntOhm
	case SeriesThrough:
	case HighImpedance:
		c.PortShuntOhm = referenceImpedanceOhm
		c.SeriesOhm = math.Max(0, (terminationOhm-referenceImpedanceOhm)/2)
	default:
		return Circuit{}, false
	}
	return c, true
}

// chain is a two-port as it is chained: V1 = a V2 + b I2, I1 = c V2 + d I2.
type chain struct{ a, b, c, d complex128 }

func shuntChain(ohm float64) chain {
	if ohm == 0 {
		return chain{1, 0, 0, 1}
	}
	return chain{1, 0, complex(1/ohm, 0), 1}
}

func seriesChain(ohm complex128) chain { return chain{1, ohm, 0, 1} }

func (m chain) then(n chain) chain {
	return chain{
		m.a*n.a + m.b*n.c, m.a*n.b + m.b*n.d,
		m.c*n.a + m.d*n.c, m.c*n.b + m.d*n.d,
	}
}

// half is one side, from the port to the unit; far is the other, from the unit to the port.
func (c Circuit) half() chain {
	return shuntChain(c.PortShuntOhm).then(seriesChain(complex(c.SeriesOhm, 0))).then(shuntChain(c.UnitShuntOhm))
}

func (c Circuit) far() chain {
	return shuntChain(c.UnitShuntOhm).then(seriesChain(complex(c.SeriesOhm, 0))).then(shuntChain(c.PortShuntOhm))
}

// Transmission returns S21 with an impedance in ohm in the place of the unit: 2/(a + b/Z0 + c Z0 + d) of the whole chain.
func (c Circuit) Transmission(unitOhm complex128) complex128 {
	z0 := complex(c.ReferenceImpedanceOhm, 0)
	m := c.half().then(seriesChain(unitOhm)).then(c.far())
	return 2 / (m.a + m.b/z0 + m.c*z0 + m.d)
}

// ShortTransmission returns S21 with a short in the place of the unit; without unit.
func (c Circuit) ShortTransmission() float64 { return real(c.Transmission(0)) }

// TerminationOhm returns 2RT: the resistance of both sides together, as the unit sees it with both ports terminated.
func (c Circuit) TerminationOhm() float64 {
	m, z0 := c.far(), complex(c.ReferenceImpedanceOhm, 0)
	return 2 * real((m.a*z0+m.b)/(m.c*z0+m.d))
}

// OpenVoltagePerEMF returns the Thevenin voltage at the unit for one volt of source EMF behind Z0; without unit.
func (c Circuit) OpenVoltagePerEMF() float64 {
	m, z0 := c.half(), complex(c.ReferenceImpedanceOhm, 0)
	return 1 / real(m.a+m.c*z0)
}

// InputImpedanceOhm returns what a port sees, the other one terminated, with an impedance in ohm in the place of the unit; an infinite one
// is an open.
func (c Circuit) InputImpedanceOhm(unitOhm complex128) complex128 {
	if cmplx.IsInf(unitOhm) {
		m := c.half()
		return m.a / m.c
	}
	m, z0 := c.half().then(seriesChain(unitOhm)).then(c.far()), complex(c.ReferenceImpedanceOhm, 0)
	return (m.a*z0 + m.b) / (m.c*z0 + m.d)
}
