package inspection

import (
	"fmt"
	"math"

	"example.com/admit/service/crystal"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
	"example.com/admit/service/uncertainty"
	"example.com/admit/service/verdict"
)

// fundamentalHz returns the measured frequency that overtones are multiples of, f1: that of the main mode over its order. 0: not measured.
func (w *workup) fundamentalHz() float64 {
	if w.nominal == nil || !w.nominal.sound() {
		return 0
	}
	return w.nominal.est.Value[resonance.ResonanceHz] / float64(w.p.Overtone)
}

// centreHz returns where the overtone of a window is looked for; 0 when the main mode was not found.
func (w *workup) centreHz(order int, ratio float64) float64 {
	f1 := w.fundamentalHz()
	if ratio > 0 {
		return f1 * float64(w.p.Overtone) * ratio
	}
	return f1 * float64(order)
}

// expectedOvertone returns what a fit of an overtone window starts from: the inductance is that of the main mode, since it is the same plate.
func (w *workup) expectedOvertone(s *sweep.Sweep, main resonance.Expected) resonance.Expected {
	e := main
	if e.ResonanceHz = w.centreHz(s.Order, s.FrequencyRatio); e.ResonanceHz == 0 {
		low, high := s.SpanHz()
		e.ResonanceHz = (low + high) / 2
	}
	return e
}

// overtoneLimits holds the overtones against their limits, and tells of those that were found without one.
func (w *workup) overtoneLimits() {
	limited := map[*fitted]bool{}
	for i := range w.p.Overtones {
		o := &w.p.Overtones[i]
		limit := parttype.Limit{Quantity: parttype.OvertoneSuppression, Bounds: o.SuppressionDB, Decide: o.Decide}
		r := verdict.Reading{Quantity: limit.Quantity, Where: verdict.Nowhere, Unit: verdict.UnitDecibel}
		r.Where.Order, r.Where.FrequencyRatio = o.Order, o.FrequencyRatio
		windows := w.windows(o.Order, o.FrequencyRatio)
		if f := w.strongest(o.Order, o.FrequencyRatio, windows); f != nil {
			limited[f] = true
			r.SuspendedBy = w.suspendedBy(false, w.nominal, f)
			w.found(o.Order, f, o.Definition, &r)
		} else {
			w.notFound(o, windows, &r, w.confidence(o.Decide))
		}
		w.limit(limit, r)
	}
	for _, f := range w.fits { // windows that no limit asks for
		if f == nil || f.sweep.Role != sweep.Overtone || limited[f] {
			continue
		}
		if best := w.strongest(f.sweep.Order, f.sweep.FrequencyRatio, w.windows(f.sweep.Order, f.sweep.FrequencyRatio)); best == f && !w.limitsOvertone(f.sweep) {
			w.found(f.sweep.Order, f, parttype.ResistanceRatio, nil)
		}
	}
}

func (w *workup) limitsOvertone(s *sweep.Sweep) bool {
	for i := range w.p.Overtones {
		if o := &w.p.Overtones[i]; o.Order == s.Order && sameRatio(o.FrequencyRatio, s.FrequencyRatio) {
			return true
		}
	}
	return false
}

// sameRatio reports whether a window and a limit mean one ratio; both may be 0.
func sameRatio(a, b float64) bool { return a == b || near(a, b, 1e-4) }

// windows returns the sweeps about one overtone.
func (w *workup) windows(order int, ratio float64) (all []*fitted) {
	for _, f := range w.fits {
		if f != nil && f.sweep.Role == sweep.Overtone && f.sweep.Order == order && sameRatio(f.sweep.FrequencyRatio, ratio) {
			all = append(all, f)
		}
	}
	return all
}

// strongest returns the window with the response of lowest resistance that lies where the overtone may lie; nil when there is none.
func (w *workup) strongest(order int, ratio float64, windows []*fitted) (best *fitted) {
	centre := w.centreHz(order, ratio)
	if centre == 0 {
		return nil
	}
	for _, f := range windows {
		if !f.sound() || !near(f.est.Value[resonance.ResonanceHz], centre, overtoneReach) {
			continue
		}
		if best == nil || f.est.Value[resonance.LogResistance] < best.est.Value[resonance.LogResistance] {
			best = f
		}
	}
	return best
}

// found reads the suppression of an overtone against the main mode, and where it lies.
func (w *workup) found(order int, f *fitted, definition parttype.Definition, r *verdict.Reading) {
	if w.nominal == nil || !w.nominal.sound() {
		return
	}
	if !w.g.scale {
		if r != nil {
			r.SuspendedBy = append(r.SuspendedBy, verdict.CalibrationMissing)
			w.cause(verdict.NewCause(verdict.CalibrationMissing, "The fixture network is not known: resistances cannot be told."))
		}
		return
	}
	both := []*resonance.Estimate{w.nominal.est, f.est}
	suppression, ok := quantityFrom(both, func(u []crystal.Unit) (float64, bool) {
		return suppressionDB(definition, u[0].Modes[0].ResistanceOhm, u[1].Modes[0].ResistanceOhm), true
	})
	if r != nil {
		value(r, suppression, ok)
	}
	m := verdict.ModeReading{Kind: verdict.OvertoneMode, Order: order}
	hz, ok1 := f.resonanceHz()
	ohm, ok2 := f.resistanceOhm()
	if !ok || !ok1 || !ok2 {
		return
	}
	m.FrequencyHz, _, ok = hz.measured()
	m.ResistanceOhm, _, ok1 = ohm.measured()
	m.SuppressionDB, _, ok2 = suppression.measured()
	if !ok || !ok1 || !ok2 {
		return
	}
	if order > 0 {
		m.MultipleRatio = w.multipleRatio(order, f)
	}
	w.modes = append(w.modes, m)
}

// multipleRatio returns fn/(n f1): a window against the fundamental, which is the main mode, or the window of order 1 of an overtone unit. Without
// a fundamental the main mode stands for it: the ratio is then (fn/n)/(fm/m).
func (w *workup) multipleRatio(order int, f *fitted) *verdict.Value {
	low, lowOrder, high, highOrder := w.nominal, w.p.Overtone, f, order
	if lowOrder > highOrder {
		low, lowOrder, high, highOrder = f, order, w.nominal, w.p.Overtone
	}
	if fundamental := w.strongest(1, 0, w.windows(1, 0)); lowOrder > 1 && fundamental != nil {
		low, lowOrder = fundamental, 1
	}
	q, ok := quantityFrom([]*resonance.Estimate{low.est, high.est}, func(u []crystal.Unit) (float64, bool) {
		return u[1].Modes[0].ResonanceHz / u[0].Modes[0].ResonanceHz * float64(lowOrder) / float64(highOrder), true
	})
	if !ok {
		return nil
	}
	v, _, ok := q.measured()
	if !ok {
		return nil
	}
	w.describeMultiple(v, lowOrder, highOrder, high)
	return &v
}

// describeMultiple says where an overtone lies, with the sign.
func (w *workup) describeMultiple(v verdict.Value, lowOrder, highOrder int, high *fitted) {
	side := "above"
	percent := 100 * (v.Value - 1)
	if percent < 0 {
		side, percent = "below", -percent
	}
	of := "the fundamental"
	if lowOrder != 1 {
		of = fmt.Sprintf("the fundamental that overtone %d stands for", lowOrder)
	}
	w.remark("Overtone %d at %s lies %.3f %% %s %d times %s: fn/(n f1) = %.6f.", highOrder,
		verdict.FormatBound(high.est.Value[resonance.ResonanceHz], verdict.UnitHertz), percent, side, highOrder, of, v.Value)
}

// suppressionDB returns a suppression by its definition.
func suppressionDB(d parttype.Definition, mainOhm, otherOhm float64) float64 {
	return network.TransmissionDB(mainOhm, otherOhm, definitionOhm(d))
}

// definitionOhm returns the termination that a definition of suppression adds to both resistances.
func definitionOhm(d parttype.Definition) float64 {
	switch d {
	case parttype.PiNetworkTransmission:
		return network.PiNetwork.NominalTerminationOhm()
	case parttype.SeriesThroughTransmission:
		return network.SeriesThrough.NominalTerminationOhm()
	}
	return 0
}

// confidence returns the confidence of a limit, its own or that of the part type.
func (w *workup) confidence(d parttype.Decide) float64 {
	if d.Confidence != 0 {
		return d.Confidence
	}
	return w.p.Decision.Confidence
}

// notFound says of an overtone that no window shows what that means: nothing, where nobody looked or something was wrong; a suppression of at
// least so many decibels, where it would have been seen.
func (w *workup) notFound(o *parttype.OvertoneLimit, windows []*fitted, r *verdict.Reading, confidence float64) {
	name := verdict.Label(parttype.OvertoneSuppression, r.Where)
	coarse := func(format string, args ...any) {
		r.SuspendedBy = append(r.SuspendedBy, verdict.SurveyTooCoarse)
		r.Note = fmt.Sprintf(format, args...)
		w.cause(verdict.NewCause(verdict.SurveyTooCoarse, name+": "+r.Note+"."))
	}
	r.SuspendedBy = w.suspendedBy(false)
	if len(windows) == 0 {
		coarse("no window was swept there")
		return
	}
	if w.nominal == nil {
		r.SuspendedBy = append(r.SuspendedBy, verdict.DriveLevelMissed)
		return
	}
	if !w.nominal.sound() {
		r.SuspendedBy = append(r.SuspendedBy, w.suspendedBy(false, w.nominal)...)
		return
	}
	if !w.g.scale {
		r.SuspendedBy = append(r.SuspendedBy, verdict.CalibrationMissing)
		w.cause(verdict.NewCause(verdict.CalibrationMissing, "The fixture network is not known: resistances cannot be told."))
		return
	}
	for _, f := range windows {
		switch f.est.State {
		case resonance.NoResonance, resonance.OutsideSweep, resonance.Found: // a capacitance, or something that is no overtone
		default:
			c := verdict.NewCause(verdict.Cause(f.est.State), fmt.Sprintf("%s: %s", name, sentence(f.est.Detail)))
			w.cause(c)
			r.SuspendedBy = append(r.SuspendedBy, c.Cause)
			return
		}
	}
	centre := w.centreHz(o.Order, o.FrequencyRatio)
	low, high := centre*(1-0.95*overtoneReach), centre*(1+0.95*overtoneReach)
	if gap, ok := covered(windows, low, high); !ok {
		coarse("the windows leave out %.6g Hz, and an overtone may lie from %.6g to %.6g Hz", gap, low, high)
		return
	}
	least := math.Inf(1)
	for _, f := range windows {
		least = math.Min(least, w.observable(f, o.Definition, confidence).suppression())
	}
	b := o.SuppressionDB
	if math.IsInf(least, -1) || b.Min != nil && least < *b.Min || b.Max != nil && least <= *b.Max {
		coarse("nothing was seen, and only a suppression below %.3g dB would have been", math.Max(least, 0))
		return
	}
	r.Unseen = &verdict.Unseen{AtLeast: least, Probability: confidence}
	stated := least
	if b.Min != nil {
		stated = *b.Min
	}
	var width float64
	for _, f := range windows {
		width = math.Max(width, w.observable(f, o.Definition, confidence).narrowestHz(stated))
	}
	if !math.IsNaN(width) && !math.IsInf(width, 0) {
		w.observability = append(w.observability, verdict.Observability{FromHz: low, ToHz: high, NarrowestWidthHz: width, SuppressionDB: stated})
	}
}

// covered reports whether windows cover a band together; gap is the first frequency that they leave out.
func covered(windows []*fitted, low, high float64) (gap float64, ok bool) {
	at := low
	for progress := true; progress && at < high; {
		progress = false
		for _, f := range windows {
			if a, b := f.sweep.SpanHz(); a <= at && b > at {
				at, progress = b, true
			}
		}
	}
	return at, at >= high
}

// sight is what a response in one window has to be to be seen with a probability.
//
// Height h and width B of a response follow from its resistance (responseHeight); L is that of the main mode, as all overtones of a plate have one.
// On a grid of step D at its worst place it has the energy
//
//	lambda = 2 (h/sigma)^2 E,   E = (pi B/2D) tanh(pi B/2D)
//
// and is seen with probability P when sqrt(lambda) >= sqrt(gain) + z(P). One wider than a tenth of the window is not told from its background,
// and one that does not ring up within a dwell is not there.
type sight struct {
	known                       bool
	gain, terminationOhm, noise float64 // of a sample
	mainOhm, inductance         float64
	definitionOhm               float64
	stepHz, spanHz, dwell       float64
	needed                      float64 // lambda
}

// observable returns the sight of a window.
func (w *workup) observable(f *fitted, definition parttype.Definition, probability float64) sight {
	s := f.sweep
	low, high := s.SpanHz()
	main := w.nominal.est.Unit().Modes[0]
	v := sight{
		noise:   math.Max(f.est.Quality.NoiseRMS, network.SampleNoise(w.c.Calibration, s)),
		mainOhm: main.ResistanceOhm, inductance: main.InductanceHenry, definitionOhm: definitionOhm(definition),
		stepHz: (high - low) / float64(s.Points()-1), spanHz: high - low, dwell: s.Timing.Dwell.Seconds(),
		needed: math.Pow(math.Sqrt(seenGain)+uncertainty.NormalQuantile(probability), 2),
	}
	v.gain, v.terminationOhm, v.known = w.responseHeight(f)
	v.known = v.known && v.noise > 0
	return v
}

// response returns resistance and loaded width of a suppression in decibels.
func (v *sight) response(db float64) (ohm, widthHz float64) {
	ohm = (v.mainOhm+v.definitionOhm)*math.Pow(10, db/20) - v.definitionOhm
	return ohm, (ohm + v.terminationOhm) / (2 * math.Pi * v.inductance)
}

// sees reports whether a suppression would have been seen.
func (v *sight) sees(db float64) bool {
	ohm, width := v.response(db)
	if width > widestShare*v.spanHz || v.dwell > 0 && v.dwell*math.Pi*width < 1 {
		return false
	}
	height := v.gain / (ohm + v.terminationOhm)
	x := math.Pi * width / (2 * v.stepHz)
	return 2*height*height/(v.noise*v.noise)*x*math.Tanh(x) >= v.needed
}

// suppression returns the largest suppression in decibels that would have been seen; minus infinity when not even the main mode itself would.
func (v sight) suppression() float64 {
	if !v.known || !v.sees(0) {
		return math.Inf(-1)
	}
	below, above := 0.0, 120.0
	for range 60 {
		if middle := (below + above) / 2; v.sees(middle) {
			below = middle
		} else {
			above = middle
		}
	}
	return below
}

// narrowestHz returns the narrowest response of a suppression that would have been seen, whatever its inductance: x tanh x = lambda sigma^2/(2 h^2).
func (v sight) narrowestHz(db float64) float64 {
	ohm, _ := v.response(db)
	height := v.gain / (ohm + v.terminationOhm)
	energy := v.needed * v.noise * v.noise / (2 * height * height)
	low, high := 0.0, 1+energy
	for range 80 {
		if x := (low + high) / 2; x*math.Tanh(x) < energy {
			low = x
		} else {
			high = x
		}
	}
	return high * 2 * v.stepHz / math.Pi
}
