package inspection

import (
	"math"

	"example.com/admit/service/verdict"
)

// Influences of the reference of a frequency to another temperature.
const (
	temperatureInfluence = "temperature"       // the unit was not quite as warm as its thermometer
	curveInfluence       = "temperature_curve" // the unit does not quite follow the curve of its part type
)

// referral returns what the part type's curve says of the temperature at which the unit was measured: the shift in ppm against the reference, and
// what that is uncertain by; ok is false when there is no curve, or nobody measured the temperature.
func (w *workup) referral() (ppm, byThermometer, byCurve float64, ok bool) {
	t, p := w.c.Begin.Temperature, w.p.Temperature
	if t == nil || p == nil || p.Curve == [3]float64{} {
		return 0, 0, 0, false
	}
	ppm, slope := p.Shift(t.Celsius)
	return ppm, slope * t.StandardUncertainty, ppm * p.CurveUncertaintyPercent / 100, true
}

// refer turns a frequency deviation in ppm, as measured, into the one that the unit has at the temperature at which its limits hold:
//
//	y0 = y - d(T) (1 + y 1e-6),   d(T) = a (T - T0) + b (T - T0)^2 + c (T - T0)^3
func (w *workup) refer(q *quantity) {
	ppm, byThermometer, byCurve, ok := w.referral()
	if !ok {
		return
	}
	q.value -= ppm * (1 + q.value*1e-6)
	q.add(influenceKey{temperatureInfluence, ""}, byThermometer)
	q.add(influenceKey{curveInfluence, ""}, byCurve)
}

// describeReferral says by how much frequencies were referred.
func (w *workup) describeReferral() {
	if ppm, byThermometer, byCurve, ok := w.referral(); ok {
		shift := verdict.Value{Value: -ppm, StandardUncertainty: math.Hypot(byThermometer, byCurve)}
		w.remark("Frequencies are held against their limits as they are at %g °C: referred by %s (k = 2) from the %.2f °C at which the unit was measured.",
			w.p.Temperature.ReferenceC, verdict.Format(shift, verdict.UnitPPM), w.c.Begin.Temperature.Celsius)
		return
	}
	switch p := w.p.Temperature; {
	case p == nil || w.c.Begin.Temperature != nil:
	case p.Curve != [3]float64{}:
		w.remark("The temperature of the unit is not known: frequencies are not referred to %g °C.", p.ReferenceC)
	case p.AllowedC.Min != nil || p.AllowedC.Max != nil:
		w.remark("The temperature of the unit is not known; the part type allows %s.", rangeText(p.AllowedC.Min, p.AllowedC.Max, "°C"))
	}
}
