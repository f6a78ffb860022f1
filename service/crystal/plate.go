package crystal

import "math"

// Plate is a quartz plate of thickness 2h in thickness shear with electrodes on both faces, shorted or open, and no edges: what
// the overtones of a real unit are compared with.
type Plate struct {
	CouplingSquared    float64 // k^2 = e26^2/(c66 eps22); 0.0078 for AT, 0.0025 for SC quartz; 0 to below 1
	ElectrodeMassRatio float64 // R, mass of both electrodes over the mass of the plate; at least 0
}

// ResonanceRoot returns X = w h/v at the series resonance of an odd order n, the root below n pi/2 of
//
//	X cot X = k^2 + R X^2
//
// to full double precision. An order that is even or below 1 gives NaN: the charges of its two halves cancel.
// Source: R. D. Mindlin, thickness shear of a plate with electrodes; the same in H. F. Tiersten, Linear Piezoelectric Plate Vibrations.
func (p Plate) ResonanceRoot(order int) float64 {
	return p.root(order, p.CouplingSquared)
}

// AntiresonanceRoot returns the same with the electrodes open, X cot X = R X^2: n pi/2 exactly for electrodes without mass.
func (p Plate) AntiresonanceRoot(order int) float64 {
	return p.root(order, 0)
}

// root finds the one root between (n-1) pi/2 and n pi/2. There X cot X falls and the right side rises, so that X cos X - (k^2 + R X^2) sin X
// changes its sign once, and it has no poles.
func (p Plate) root(order int, coupling float64) float64 {
	if order < 1 || order%2 == 0 || !(coupling >= 0 && coupling < 1) || !(p.ElectrodeMassRatio >= 0) {
		return math.NaN()
	}
	high := float64(order) * math.Pi / 2
	if coupling == 0 && p.ElectrodeMassRatio == 0 {
		return high
	}
	low := float64(order-1) * math.Pi / 2
	sign := 1.0 // of the left side at low
	if (order-1)/2%2 == 1 {
		sign = -1
	}
	for range 200 {
		x := low + (high-low)/2
		if x == low || x == high {
			break
		}
		sin, cos := math.Sincos(x)
		if sign*(x*cos-(coupling+p.ElectrodeMassRatio*x*x)*sin) > 0 {
			low = x
		} else {
			high = x
		}
	}
	return high
}

// OvertoneRatio returns fn/(n f1), by how much the series resonance of an odd order n lies above n times the fundamental. It is above 1
// for a plate without edges, since only its antiresonances are whole multiples; 1.0028 for n = 3 of AT quartz. Small electrodes and contours
// raise the fundamental most and may turn the sign: real units lie between 0.995 and 1.007.
func (p Plate) OvertoneRatio(order int) float64 {
	return p.ResonanceRoot(order) / (float64(order) * p.ResonanceRoot(1))
}

// CapacitanceRatio returns r = C0/Cn of an odd order, n^2 pi^2/(8 k^2): 158 for the fundamental of AT quartz. Real fundamentals have 180 to 400,
// because the mode fills a part of the electrode only.
// Source: D. Johannsmann, A. Langhoff, C. Leppin, Sensors 21 (2021) 3490, equation A3.
func (p Plate) CapacitanceRatio(order int) float64 {
	n := float64(order) * math.Pi
	return n * n / (8 * p.CouplingSquared)
}
