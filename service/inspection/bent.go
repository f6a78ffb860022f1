package inspection

import (
	"fmt"
	"math"
	"math/cmplx"

	"example.com/admit/service/leastsquares"
	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
)

// A unit that depends on its drive level bends the trace of its own sweep: near resonance it is driven hardest, and is another unit there than at
// the edges. The fit of one linear unit then leaves a systematic residual and calls the trace a misfit, although it shows very well what the unit does.
// Where the drive level is what a part type limits, such a trace is fitted again with R1 and fs that follow the power in R1:
//
//	R1(p) = R (1 + a (p - 1)),   fs(p) = f (1 + b (p - 1))
//
// with p the power over that of the loudest sample, so that R and f are the values at the highest power of the sweep, which is what its level means.
// Power and unit depend on each other at every sample; p is found by turns.

// bent is that model of one sweep. Its parameters are in units of order one; see the indices.
type bent struct {
	frequencyHz        []float64 // true
	sample             []complex128
	terms              *network.Terms
	terminationOhm     complex128 // where the terms know none
	start              resonance.Estimate
	loudest            float64 // power of the loudest sample, for one volt
	withPhase          bool
	conductanceSiemens float64

	moved []float64 // scratch of the derivatives
}

// The parameters: offset of f from the start in loaded bandwidths, ln R, ln L, C0 over that of the start, a, b in loaded bandwidths, phase.
const (
	bentOffset = iota
	bentResistance
	bentInductance
	bentShunt
	bentSlope
	bentShift
	bentPhase
	bentParameters
)

// unit is what the parameters say.
type bentUnit struct {
	resonanceHz, ohm, henry, farad float64
	slope, shiftHz, phase          float64
}

func (m *bent) unit(params []float64) bentUnit {
	width := m.start.Quality.LoadedBandwidthHz
	v := &m.start.Value
	u := bentUnit{
		resonanceHz: v[resonance.ResonanceHz] + params[bentOffset]*width,
		ohm:         math.Exp(v[resonance.LogResistance] + params[bentResistance]),
		henry:       math.Exp(v[resonance.LogInductance] + params[bentInductance]),
		farad:       v[resonance.ShuntCapacitanceFarad] + params[bentShunt]*m.shuntScale(),
		slope:       params[bentSlope], shiftHz: params[bentShift] * width,
		phase: v[resonance.PhaseRad],
	}
	if m.withPhase {
		u.phase = params[bentPhase]
	}
	return u
}

func (m *bent) shuntScale() float64 {
	return math.Max(math.Abs(m.start.Value[resonance.ShuntCapacitanceFarad]), 0.1e-12)
}

// arm returns the admittance of the motional arm at a point and a power, and the resistance in it.
func (m *bent) arm(i int, u *bentUnit, p float64) (arm complex128, ohm float64) {
	f, fs := m.frequencyHz[i], u.resonanceHz+u.shiftHz*(p-1)
	ohm = u.ohm * (1 + u.slope*(p-1))
	return 1 / complex(ohm, 2*math.Pi*u.henry*(f-fs)*(f+fs)/f), ohm
}

// admittance returns that of the unit at a point and a power.
func (m *bent) admittance(i int, u *bentUnit, p float64) complex128 {
	arm, _ := m.arm(i, u, p)
	return complex(m.conductanceSiemens, 2*math.Pi*m.frequencyHz[i]*u.farad) + arm
}

// at returns the sample of the model at a point, and the power in R1 for one volt of open voltage.
func (m *bent) at(i int, u *bentUnit) (sample complex128, watt float64) {
	shunt := complex(m.conductanceSiemens, 2*math.Pi*m.frequencyHz[i]*u.farad)
	termination := m.terms.C[i]
	if termination == 0 {
		termination = m.terminationOhm
	}
	var y complex128
	p := 1.0
	for range 40 {
		arm, ohm := m.arm(i, u, p)
		y = shunt + arm
		current := cmplx.Abs(arm / (1 + termination*y))
		watt = current * current * ohm
		next := watt / m.loudest
		if math.Abs(next-p) < 1e-10 {
			break
		}
		p = next
	}
	return m.terms.Sample(i, y), watt
}

// Evaluate writes residuals and their derivatives.
func (m *bent) Evaluate(params, residual, jacobian []float64) {
	differences(m.residuals, &m.moved, params, residual, jacobian)
}

// differences evaluates residuals and, where they are asked for, their derivatives by differences: traces that need such a model are rare. The parameters
// are of order one.
func differences(residuals func(params, residual []float64), moved *[]float64, params, residual, jacobian []float64) {
	residuals(params, residual)
	if jacobian == nil {
		return
	}
	n := len(residual)
	*moved = append((*moved)[:0], params...)
	const step = 1e-5
	for k := range params {
		(*moved)[k] = params[k] + step
		column := jacobian[k*n : (k+1)*n]
		residuals(*moved, column)
		(*moved)[k] = params[k]
		for i := range column {
			column[i] = (column[i] - residual[i]) / step
		}
	}
}

func (m *bent) residuals(params, residual []float64) {
	u := m.unit(params)
	turn := cmplx.Rect(1, u.phase)
	for i, s := range m.sample {
		v, _ := m.at(i, &u)
		d := s - v*turn
		residual[2*i], residual[2*i+1] = real(d), imag(d)
	}
}

// What makes a trace a bent one: the gain of log-likelihood over the linear unit, and what may be left.
const (
	bentGain      = 60.0
	bentLeftNoise = 1.5   // rms over the receiver's noise
	bentLeftShare = 0.003 // or of the response
)

// unbend fits a sweep with a unit that follows its drive, where that describes the trace and a linear unit does not, and puts the estimate at the
// highest power in place of the linear one.
func (b *bench) unbend(f *fitted, req *resonance.Request) {
	est := f.est
	suspect := est.State == resonance.Misfit || est.State == resonance.CalibrationMismatch || est.State == resonance.Found && (est.Quality.ReducedChiSquare > 1.2 || math.Abs(est.Quality.ResidualCorrelation) > 0.15)
	if !suspect || !readable(est) || !f.driven || !f.sweep.Quantity.Complex() || req.Terms.D != 1 {
		return
	}
	m := newBent(f, req)
	n := 2 * len(m.sample)
	params := make([]float64, bentParameters)
	residual := make([]float64, n)
	params[bentPhase] = est.Value[resonance.PhaseRad]
	m.normalise(params)
	m.residuals(params, residual)
	before := sumOfSquares(residual)
	var workspace leastsquares.Workspace
	for _, withPhase := range []bool{false, true} {
		m.withPhase = withPhase
		p := params[:bentPhase]
		if withPhase {
			p = params
		}
		// The powers are measured in that of the loudest sample, which the fit moves a little.
		var result leastsquares.Result
		for range 2 {
			m.normalise(p)
			result = workspace.Fit(m, n, p, leastsquares.Options{ComplexPairs: true, IterationLimit: 60})
		}
		if result.Status != leastsquares.Converged && !(result.Offset < 0.1) {
			continue
		}
		left := math.Sqrt(2 * result.SumOfSquares / float64(max(1, result.DegreesOfFreedom)))
		gain := float64(n) * math.Log(before/result.SumOfSquares)
		if gain > bentGain && m.white(left, req) && m.unit(p).ohm > 0 {
			m.take(f, req, &workspace, p, result, left)
			return
		}
	}
}

// readable reports whether an estimate holds a unit that another model can be started from, whatever was thought of the trace.
func readable(est *resonance.Estimate) bool {
	return est.Value[resonance.ResonanceHz] > 0 && est.Quality.LoadedBandwidthHz > 0 && !est.ScaleUnknown
}

// white reports whether what a model leaves, by its rms, is noise.
func (m *bent) white(left float64, req *resonance.Request) bool {
	response := math.Pow(10, m.start.Quality.SNRDecibel/20) * noiseOf(req, &m.start)
	return req.NoiseRMS > 0 && left < bentLeftNoise*req.NoiseRMS || left < bentLeftShare*response
}

// noiseOf returns the noise that the signal-to-noise ratio of an estimate is told by.
func noiseOf(req *resonance.Request, est *resonance.Estimate) float64 {
	if req.NoiseRMS > 0 {
		return req.NoiseRMS
	}
	return est.Quality.NoiseRMS
}

func newBent(f *fitted, req *resonance.Request) *bent {
	s := f.sweep
	m := &bent{
		terms: req.Terms, terminationOhm: complex(f.drive.TerminationOhm, 0), start: *f.est,
		conductanceSiemens: f.est.Value[resonance.ShuntConductanceSiemens],
	}
	for i, hz := range s.FrequencyHz {
		m.frequencyHz = append(m.frequencyHz, hz*(1+req.ClockOffset))
		m.sample = append(m.sample, complex(s.Re[i], s.Im[i]))
	}
	return m
}

// normalise makes the loudest sample the one at which R and f are the parameters.
func (m *bent) normalise(params []float64) {
	u := m.unit(params)
	u.slope, u.shiftHz = 0, 0
	m.loudest = 1
	highest := 0.0
	for i := range m.sample {
		_, watt := m.at(i, &u)
		highest = math.Max(highest, watt)
	}
	m.loudest = highest
}

// take puts the estimate at the highest power in place of the linear one.
func (m *bent) take(f *fitted, req *resonance.Request, workspace *leastsquares.Workspace, params []float64, result leastsquares.Result, left float64) {
	est := f.est
	u := m.unit(params)
	width, p := m.start.Quality.LoadedBandwidthHz, len(params)
	scale := [bentParameters]float64{bentOffset: width, bentResistance: 1, bentInductance: 1, bentShunt: m.shuntScale(), bentPhase: 1}
	place := [bentParameters]resonance.Parameter{
		bentOffset: resonance.ResonanceHz, bentResistance: resonance.LogResistance, bentInductance: resonance.LogInductance,
		bentShunt: resonance.ShuntCapacitanceFarad, bentPhase: resonance.PhaseRad,
	}
	taken := []int{bentOffset, bentResistance, bentInductance, bentShunt}
	if m.withPhase {
		taken = append(taken, bentPhase)
	}
	est.State, est.Statistical, est.Systematic = resonance.Found, resonance.Matrix{}, est.Systematic[:0]
	est.Value[resonance.ResonanceHz], est.Value[resonance.LogResistance] = u.resonanceHz, math.Log(u.ohm)
	est.Value[resonance.LogInductance], est.Value[resonance.ShuntCapacitanceFarad] = math.Log(u.henry), u.farad
	est.Value[resonance.PhaseRad] = u.phase
	covariance := workspace.Covariance()
	for _, i := range taken {
		for _, k := range taken {
			est.Statistical[place[i]][place[k]] = covariance[i*p+k] * result.ResidualVariance * scale[i] * scale[k]
		}
	}
	shift, response := make([]float64, 2*len(m.sample)), make([]float64, p)
	turn := cmplx.Rect(1, u.phase)
	terms := m.terms
	base := make([]float64, len(shift))
	m.residuals(params, base)
	for c := range req.Contributions {
		m.terms = &req.Contributions[c].Terms
		for i, s := range m.sample {
			v, _ := m.at(i, &u)
			d := s - v*turn
			shift[2*i], shift[2*i+1] = real(d)-base[2*i], imag(d)-base[2*i+1]
		}
		workspace.Response(response, shift)
		var by [resonance.Parameters]float64
		for _, i := range taken {
			by[place[i]] = response[i] * scale[i]
		}
		est.Systematic = append(est.Systematic, systematic(req.Contributions[c].Name, req.Contributions[c].Group, by))
	}
	m.terms = terms
	if uncertain := req.ClockUncertainty; uncertain > 0 {
		est.Systematic = append(est.Systematic, systematic(resonance.ClockInfluence, "", [resonance.Parameters]float64{resonance.ResonanceHz: uncertain * u.resonanceHz}))
	}
	q := &est.Quality
	q.NoiseRMS = left
	if req.NoiseRMS > 0 {
		q.ReducedChiSquare = left * left / (req.NoiseRMS * req.NoiseRMS)
	}
	q.ResidualCorrelation = 0
	// Where the linear fit took the bend for ringing, it did so with a dwell of its own.
	q.Memory, q.DwellSeconds = false, f.sweep.Timing.Dwell.Seconds()
	q.SettlingTimeConstants = q.DwellSeconds * math.Pi * q.LoadedBandwidthHz
	ppm := u.shiftHz / u.resonanceHz * 1e6
	est.Detail = fmt.Sprintf("The trace of sweep %d bends with the drive level: from the edge of the sweep to its highest power R1 changes by %.2g %% and fs by %.2g ppm.", f.index, 100*u.slope/(1-u.slope), ppm)
}

func systematic(name, group string, shift [resonance.Parameters]float64) resonance.Contribution {
	c := resonance.Contribution{Name: name, Group: group, Shift: shift}
	for i := range shift {
		for k := range shift {
			c.Covariance[i][k] = shift[i] * shift[k]
		}
	}
	return c
}

func sumOfSquares(v []float64) (sum float64) {
	for _, x := range v {
		sum += x * x
	}
	return sum
}
