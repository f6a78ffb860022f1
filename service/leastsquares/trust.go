package leastsquares

import "math"

// trust is the trusted region |D δ| ≤ radius and the step that was last solved for in it.
type trust struct {
	scale   []float64 // p, diagonal of D in order of the parameters
	radius  float64
	damping float64   // λ of the last step
	ratio   []float64 // p, D over the column length, in the order of the triangle
	damped  []float64 // p by p, triangle of R stacked on √λ D
	rhs     []float64 // p, right-hand side that goes with it
	row     []float64 // p, one damping row while it is rotated in
	y       []float64 // p, the step in the coordinates of the triangle
	fall    []float64 // p, R y
	extent  float64   // |D δ|
	linear  float64   // |J δ|²
}

func (s *trust) resize(p int) {
	s.scale = sized(s.scale, p)
	s.ratio = sized(s.ratio, p)
	s.damped = sized(s.damped, p*p)
	s.rhs = sized(s.rhs, p)
	s.row = sized(s.row, p)
	s.y = sized(s.y, p)
	s.fall = sized(s.fall, p)
}

// openTrust sets the first radius at the start.
func (w *Workspace) openTrust() {
	s := &w.trust
	if w.options.Scale != nil {
		for k, size := range w.options.Scale {
			s.scale[k] = 1 / size
		}
	} else {
		copy(s.scale, w.length)
	}
	w.rescale()
	s.radius, s.damping = math.Inf(1), 0
	if w.options.InitialDamping > 0 {
		// In the coordinates of the trusted region a column has the length 1/ratio; damping is relative to the longest.
		least := math.Inf(1)
		for _, q := range s.ratio {
			least = min(least, q)
		}
		s.damping = w.options.InitialDamping / (least * least)
		w.solveDamped(s.damping)
		s.radius = s.extent
	}
}

// rescale follows a new triangle. Scales only grow: a column that has become short for the moment must not let its parameter run
// away.
func (w *Workspace) rescale() {
	if w.options.Scale == nil {
		for k, l := range w.length {
			w.scale[k] = max(w.scale[k], l)
		}
	}
	for j, k := range w.order {
		w.ratio[j] = w.scale[k] / w.length[k]
	}
}

// step solves for the step of the trusted region: the undamped one where it fits, otherwise that with the λ for which |D δ|
// equals the radius within a tenth. It returns the reduction of the cost that the linear model predicts, and the slope of the
// cost along the step.
//
// λ is found by Newton's method on 1/|Dδ(λ)|, which is nearly linear in λ (Hebden; Moré 1978, section 5), kept between bounds.
func (w *Workspace) step() (predicted, slope float64) {
	s, t := &w.trust, &w.triangle
	w.solveUndamped()
	if s.extent <= 1.1*s.radius {
		s.damping = 0
		return w.prediction()
	}
	var lower float64
	if t.rank == t.p {
		lower = (s.extent - s.radius) * s.extent / w.bend(t.r)
	}
	upper := w.steepest() / s.radius
	lambda := s.damping
	for range 10 {
		if !(lambda > lower && lambda < upper) {
			lambda = max(1e-3*upper, math.Sqrt(lower*upper))
		}
		w.solveDamped(lambda)
		excess := s.extent - s.radius
		if math.Abs(excess) <= 0.1*s.radius {
			break
		}
		if excess > 0 {
			lower = max(lower, lambda)
		} else {
			upper = min(upper, lambda)
		}
		lambda += excess / s.radius * s.extent * s.extent / w.bend(s.damped)
	}
	return w.prediction()
}

// solveUndamped sets y to the Gauss-Newton step −R⁻¹Qᵀr, and to the basic solution where the rank is deficient.
func (w *Workspace) solveUndamped() {
	s, t := &w.trust, &w.triangle
	for j, z := range t.projected {
		s.y[j] = -z
	}
	t.solve(s.y)
	s.damping = 0
	w.measure()
}

// solveDamped sets y to the minimiser of |projected + R y|² + λ|ratio y|². Each damping row is rotated into the triangle, which
// keeps the digits that adding λ to RᵀR would lose.
func (w *Workspace) solveDamped(lambda float64) {
	s, t := &w.trust, &w.triangle
	p := t.p
	copy(s.damped, t.r)
	copy(s.rhs, t.projected)
	// Beyond the rank the triangle holds rounding only.
	for j := t.rank; j < p; j++ {
		clear(s.damped[j*p+j : (j+1)*p])
		s.rhs[j] = 0
	}
	root := math.Sqrt(lambda)
	for j := range p {
		clear(s.row)
		s.row[j] = root * s.ratio[j]
		tail := 0.0
		for k := j; k < p; k++ {
			if s.row[k] == 0 {
				continue
			}
			h := math.Hypot(s.damped[k*p+k], s.row[k])
			c, sn := s.damped[k*p+k]/h, s.row[k]/h
			s.damped[k*p+k] = h
			for l := k + 1; l < p; l++ {
				a, b := s.damped[k*p+l], s.row[l]
				s.damped[k*p+l] = c*a + sn*b
				s.row[l] = c*b - sn*a
			}
			s.rhs[k], tail = c*s.rhs[k]+sn*tail, c*tail-sn*s.rhs[k]
		}
	}
	for j, z := range s.rhs {
		s.y[j] = -z
	}
	backSubstitute(s.damped, s.y, p, p)
	s.damping = lambda
	w.measure()
}

// measure sets extent to |D δ|.
func (w *Workspace) measure() {
	var sum float64
	for j, y := range w.y {
		q := w.ratio[j] * y
		sum += q * q
	}
	w.extent = math.Sqrt(sum)
}

// bend returns |U⁻ᵀ D²δ|², which is −|Dδ| d|Dδ|/dλ for the triangle U of the current step.
func (w *Workspace) bend(u []float64) float64 {
	v := w.work
	for j, y := range w.y {
		v[j] = w.ratio[j] * w.ratio[j] * y
	}
	forwardSubstitute(u, v, w.triangle.p, w.triangle.p)
	return dot(v, v)
}

// steepest returns |D⁻¹Jᵀr|; divided by the radius it bounds λ from above.
func (w *Workspace) steepest() float64 {
	t := &w.triangle
	var sum float64
	for j := range t.p {
		var g float64
		for i := range min(j+1, t.rank) {
			g += t.r[i*t.p+j] * t.projected[i]
		}
		g /= w.ratio[j]
		sum += g * g
	}
	return math.Sqrt(sum)
}

// prediction returns |r|² − |r + Jδ|² = |Ry|² + 2λ|Dδ|² and −d|r + τJδ|²/dτ at τ = 0, both sums of positive terms.
func (w *Workspace) prediction() (predicted, slope float64) {
	t := &w.triangle
	for i := range t.rank {
		w.fall[i] = dot(t.r[i*t.p+i:(i+1)*t.p], w.y[i:])
	}
	w.linear = dot(w.fall[:t.rank], w.fall[:t.rank])
	damped := w.damping * w.extent * w.extent
	return w.linear + 2*damped, 2 * (w.linear + damped)
}

// follow changes the radius after a trial: actual and predicted are the reductions of the cost, slope as prediction gave it.
// A reduction that was not finite is given as −Inf.
func (s *trust) follow(actual, predicted, slope float64) {
	s.radius = min(s.radius, 10*s.extent)
	switch {
	case actual < 0.25*predicted:
		shrink := 0.5
		if actual < 0 {
			// The parabola through the cost, its slope and the new cost has its minimum there.
			shrink = max(0.1, min(0.5, slope/(2*(slope-actual))))
		}
		s.radius = shrink * min(s.radius, s.extent)
		s.damping /= shrink
	case s.damping == 0 || actual >= 0.75*predicted:
		s.radius = 2 * s.extent
		s.damping /= 2
	}
}
