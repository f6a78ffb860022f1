package network

import "math"

// Three meanings of "suppression" are in use, and a limit means only one of them: for 20 and 200 ohm they are 20.00, 13.98 and 7.96 dB.
// All take resistances in ohm above 0 and grow with the resistance of the unwanted mode.

// ResistanceRatioDB returns 20 log10(Rn/R1), the suppression of an unwanted mode as the resistances alone tell it.
// Source: makers' technical pages; recalled as the definition of IEC 60444-9.
func ResistanceRatioDB(mainOhm, unwantedOhm float64) float64 {
	return TransmissionDB(mainOhm, unwantedOhm, 0)
}

// PiNetworkTransmissionDB returns 20 log10((Rn + 25)/(R1 + 25)), the difference that a nominal pi-network shows.
func PiNetworkTransmissionDB(mainOhm, unwantedOhm float64) float64 {
	return TransmissionDB(mainOhm, unwantedOhm, PiNetwork.NominalTerminationOhm())
}

// SeriesThroughTransmissionDB returns 20 log10((Rn + 100)/(R1 + 100)), the difference in a series-through fixture of 50-ohm ports.
func SeriesThroughTransmissionDB(mainOhm, unwantedOhm float64) float64 {
	return TransmissionDB(mainOhm, unwantedOhm, SeriesThrough.NominalTerminationOhm())
}

// TransmissionDB returns 20 log10((Rn + Zt)/(R1 + Zt)), the difference between two modes at their resonances behind a termination.
func TransmissionDB(mainOhm, unwantedOhm, terminationOhm float64) float64 {
	return 20 * math.Log10((unwantedOhm+terminationOhm)/(mainOhm+terminationOhm))
}
