package survey

import (
	"math"

	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// term is one entry of the matrix that turns fitted parameters into those of the result.
type term struct {
	column int
	factor float64
}

// mapping turns the parameters of the fit, in the order in which modes were found, into those of the result: row by row at most two terms.
type mapping struct {
	rows [3*MostModes + 3][2]term
	used [3*MostModes + 3]int
	n    int
}

func (t *mapping) begin(rows int) {
	t.n = rows
	clear(t.used[:])
}

func (t *mapping) add(row, column int, factor float64) {
	t.rows[row][t.used[row]] = term{column, factor}
	t.used[row]++
}

// vector writes the mapped vector.
func (t *mapping) vector(dst, from []float64) {
	for i := range t.n {
		dst[i] = 0
		for _, e := range t.rows[i][:t.used[i]] {
			dst[i] += e.factor * from[e.column]
		}
	}
}

// covariance writes the mapped covariance, from times variance.
func (t *mapping) covariance(dst, from []float64, width int, variance float64) {
	for i := range t.n {
		for k := range t.n {
			sum := 0.0
			for _, a := range t.rows[i][:t.used[i]] {
				for _, b := range t.rows[k][:t.used[k]] {
					if c := from[a.column*width+b.column]; c != 0 {
						sum += a.factor * b.factor * c * variance
					}
				}
			}
			if math.IsNaN(sum) {
				sum = math.Inf(1)
			}
			dst[i*t.n+k] = sum
		}
	}
}

// fill writes what was found into the result.
func (v *Surveyor) fill(out *Result) {
	m, s := &v.model, &v.samples
	params := v.now.params
	q := &out.Quality
	v.describe(out)
	v.arrange(out)

	rows := int(perMode)*len(out.Modes) + 3
	t := &v.mapping
	t.begin(rows)
	out.Value = grown(out.Value, rows)
	clear(out.Value)
	for i := range out.Modes {
		at, row := m.at(v.place[i]), int(perMode)*i
		p := params[at : at+m.perMode()]
		t.add(row, at, 1)
		out.Value[row] = s.referenceHz + p[0]
		if !s.unknown {
			t.add(row+1, at+1, 1)
			t.add(row+2, at+2, 1)
			out.Value[row+1], out.Value[row+2] = math.Max(p[1], math.Log(leastResistanceOhm)), p[2]
			continue
		}
		// ln R = -ln|a|, ln L = ln R - ln(4 pi half). The amplitude's two parts enter ln|a| only; half's share of ln L is put in by shapeShare.
		size := p[2]*p[2] + p[3]*p[3]
		t.add(row+1, at+2, -p[2]/size)
		t.add(row+1, at+3, -p[3]/size)
		t.add(row+2, at+1, -1)
		out.Value[row+1] = -math.Log(size) / 2
		out.Value[row+2] = out.Value[row+1] - math.Log(4*math.Pi) - p[1]
	}
	shared := rows - 3
	if !s.unknown {
		t.add(shared, 0, 1)
		out.Value[shared] = params[0]
		for k, p := range [...]optional{shuntConductance, freePhase} {
			if m.has(p) {
				t.add(shared+1+k, m.column(p), 1)
				out.Value[shared+1+k] = m.value(params, p)
			}
		}
	}
	out.Statistical = grown(out.Statistical, rows*rows)
	width := len(params)
	t.covariance(out.Statistical, v.joint.Covariance(), width, v.partVariance(q))
	if s.unknown {
		shapeShare(out.Statistical, rows, len(out.Modes))
	}
	v.systematic(out)
	for i := range out.Modes {
		v.fillMode(out, i)
	}
	if !s.unknown {
		out.ShuntCapacitanceFarad = out.quantity(shared, 1)
		out.ShuntConductanceSiemens = out.quantity(shared+1, 1)
		out.PhaseRad = out.quantity(shared+2, 1)
	}
	v.suppressions(out)
}

// shapeShare completes the covariance of ln L = ln R + (ln L - ln R): until then the rows of ln L hold the share of the width alone.
func shapeShare(covariance []float64, rows, modes int) {
	for i := range modes {
		r, l := int(perMode)*i+1, int(perMode)*i+2
		for k := range rows {
			covariance[l*rows+k] += covariance[r*rows+k]
		}
		for k := range rows {
			covariance[k*rows+l] += covariance[k*rows+r]
		}
	}
}

// arrange decides which mode is what and lists them, the main mode or overtone first and the others by frequency.
func (v *Surveyor) arrange(out *Result) {
	m, s := &v.model, &v.samples
	v.chief = v.chiefMode()
	v.place = v.place[:0]
	for k := range v.now.modes {
		at := len(v.place)
		v.place = append(v.place, k)
		for at > 0 && v.place[at-1] != v.chief && (k == v.chief || v.now.params[m.at(v.place[at-1])] > v.now.params[m.at(k)]) {
			v.place[at] = v.place[at-1]
			at--
		}
		v.place[at] = k
	}
	for _, k := range v.place {
		mode := Mode{Kind: UnwantedMode, Gain: v.now.gain[k]}
		w := v.request.Sweep
		if k == v.chief {
			mode.Kind = MainMode
			if w.Role == sweep.Overtone {
				mode.Kind, mode.Order, mode.FrequencyRatio = OvertoneMode, w.Order, w.FrequencyRatio
			}
		}
		l := m.lobeOf(v.now.params, k)
		if mode.Gain == 0 {
			mode.Gain = v.gainOf(v.energyOf(v.now.params, k))
		}
		mode.LoadedFrequencyHz = s.referenceHz + l.centreHz
		mode.LoadedWidthHz.Value = 2 * l.halfHz
		mode.TimeConstantSeconds = 1 / (2 * math.Pi * l.halfHz)
		mode.SupportPoints = v.support(l)
		mode.Outside = l.centreHz < s.lowHz || l.centreHz > s.highHz
		out.Modes = append(out.Modes, mode)
	}
}

// chiefMode returns the mode that is the main one, or of an overtone window the overtone; -1 where the main mode is known and not here.
func (v *Surveyor) chiefMode() int {
	main, s := v.request.Main, &v.samples
	strongest := v.strongest()
	if v.request.Sweep.Role == sweep.Overtone || main == nil || main.State != resonance.Found || s.unknown {
		return strongest
	}
	const apartPPM = 50 // two sweeps of one unit at different drive and temperature
	offset := main.Value[resonance.ResonanceHz] - s.referenceHz
	best, most := -1, 0.0
	for k := range v.now.modes {
		l := v.model.lobeOf(v.now.params, k)
		if math.Abs(l.centreHz-offset) < math.Max(4*l.halfHz, apartPPM*1e-6*s.referenceHz) && v.visible(l) > most {
			best, most = k, v.visible(l)
		}
	}
	return best
}

// support returns how many points carry the response of a lobe: (sum a)^2/sum a^2 with a = 1/(1 + t^2). One that rings is seen by all that
// follow in its time constant.
func (v *Surveyor) support(l lobe) float64 {
	s := &v.samples
	var sum, squares float64
	for i, f := range s.offsetHz {
		if s.scale[i] == 0 {
			continue
		}
		t := (f - l.centreHz) / l.halfHz
		a := 1 / (1 + t*t)
		sum += a
		squares += a * a
	}
	if squares == 0 {
		return 0
	}
	points := sum * sum / squares
	if v.model.memory {
		points = math.Max(points, 1/(2*math.Pi*l.halfHz*v.model.ring.dwell))
	}
	return points
}

// fillMode writes the quantities of one mode.
func (v *Surveyor) fillMode(out *Result, i int) {
	mode := &out.Modes[i]
	row := int(perMode) * i
	r, l := math.Exp(out.Value[row+1]), math.Exp(out.Value[row+2])
	mode.FrequencyHz = out.quantity(row, 1)
	mode.ResistanceOhm = out.quantity(row+1, r)
	mode.ResistanceOhm.Value = r
	mode.InductanceHenry = out.quantity(row+2, l)
	mode.InductanceHenry.Value = l
	width := mode.LoadedWidthHz.Value
	gradient := [2]float64{r / (2 * math.Pi * l), -width} // by ln R and ln L; what the mode sees moves little
	mode.LoadedWidthHz = out.combined(width, []int{row + 1, row + 2}, gradient[:])
}

// quantity returns one of Value with its uncertainty, times a factor.
func (r *Result) quantity(row int, factor float64) Quantity {
	q := Quantity{Value: r.Value[row]}
	n := len(r.Value)
	q.Statistical = factor * math.Sqrt(r.Statistical[row*n+row])
	sum := 0.0
	for i := range r.Systematic {
		d := factor * r.Systematic[i].Shift[row]
		sum += d * d
	}
	q.Systematic = math.Sqrt(sum)
	return q
}

// combined returns a quantity that depends on several of Value.
func (r *Result) combined(value float64, rows []int, gradient []float64) Quantity {
	n := len(r.Value)
	sum := 0.0
	for i, a := range rows {
		for k, b := range rows {
			if f := gradient[i] * gradient[k]; f != 0 {
				sum += f * r.Statistical[a*n+b]
			}
		}
	}
	if math.IsNaN(sum) {
		sum = math.Inf(1)
	}
	q := Quantity{Value: value, Statistical: math.Sqrt(math.Max(sum, 0))}
	sum = 0
	for i := range r.Systematic {
		d := 0.0
		for k, a := range rows {
			d += gradient[k] * r.Systematic[i].Shift[a]
		}
		sum += d * d
	}
	q.Systematic = math.Sqrt(sum)
	return q
}

// perNeper is 20/ln 10: decibels of a ratio from its logarithm.
const perNeper = 20 / math.Ln10

// suppressions fills the suppression of every other mode against the main one,
//
//	S = 20 log10((Rn + Zt)/(R1 + Zt)),    dS = 20/ln 10 (Rn/(Rn + Zt) dln Rn - R1/(R1 + Zt) dln R1)
//
// with R1 from this sweep or from the main sweep, whichever tells it better. In the first case its correlation with Rn is that of the joint fit;
// in the second noise is independent, and influences of the same name and group move both.
func (v *Surveyor) suppressions(out *Result) {
	main := out.MainIndex()
	known := v.request.Main
	if known != nil && (known.State != resonance.Found || known.ScaleUnknown || v.samples.unknown) {
		known = nil
	}
	n := len(out.Value)
	if main >= 0 && known != nil {
		row := out.Index(main, LogResistance)
		if out.Statistical[row*n+row] <= known.Statistical[resonance.LogResistance][resonance.LogResistance] {
			known = nil
		}
	}
	v.reference = 0
	switch {
	case known != nil:
		v.reference = math.Exp(known.Value[resonance.LogResistance])
	case main >= 0:
		v.reference = math.Exp(out.Value[out.Index(main, LogResistance)])
	case v.samples.unknown && len(out.Modes) > 0:
		main = 0
		v.reference = math.Exp(out.Value[out.Index(0, LogResistance)])
	default:
		return
	}
	for i := range out.Modes {
		mode := &out.Modes[i]
		mode.Suppressed = true
		if i == main {
			continue
		}
		row := out.Index(i, LogResistance)
		r := math.Exp(out.Value[row])
		for d := range Definitions {
			z := d.terminationOhm()
			if v.samples.unknown && d != ResistanceRatio {
				continue
			}
			byMode, byMain := perNeper*r/(r+z), -perNeper*v.reference/(v.reference+z)
			value := network.TransmissionDB(v.reference, r, z)
			if known == nil {
				mode.Suppression[d] = out.combined(value, []int{row, out.Index(main, LogResistance)}, []float64{byMode, byMain})
				continue
			}
			q := out.combined(value, []int{row}, []float64{byMode})
			q.Statistical = math.Hypot(q.Statistical, byMain*math.Sqrt(known.Statistical[resonance.LogResistance][resonance.LogResistance]))
			q.Systematic = jointSystematic(out, known, row, byMode, byMain)
			mode.Suppression[d] = q
		}
	}
}

// jointSystematic returns the systematic uncertainty of byMode ln Rn + byMain ln R1 with Rn from this sweep and R1 from the main sweep.
func jointSystematic(out *Result, known *resonance.Estimate, row int, byMode, byMain float64) float64 {
	sum := 0.0
	for i := range out.Systematic {
		c := &out.Systematic[i]
		d := byMode * c.Shift[row]
		for k := range known.Systematic {
			if o := &known.Systematic[k]; o.Name == c.Name && o.Group == c.Group {
				d += byMain * o.Shift[resonance.LogResistance]
			}
		}
		sum += d * d
	}
	for k := range known.Systematic {
		o := &known.Systematic[k]
		common := false
		for i := range out.Systematic {
			common = common || out.Systematic[i].Name == o.Name && out.Systematic[i].Group == o.Group
		}
		if !common {
			d := byMain * o.Shift[resonance.LogResistance]
			sum += d * d
		}
	}
	return math.Sqrt(sum)
}
