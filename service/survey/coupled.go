package survey

import "math"

// coupled holds the natural frequencies of all modes in the network that they share, and how they move with the parameters. The modes meet in
// the impedance Zs of the network: a free oscillation is a complex frequency q at which
//
//	G(q) = Y(q) + 1/Zs = 0,    r = -1/(Zs^2 Y'(q))
//
// with r the residue of F = Y/(1 + Zs Y) there. Zs is that at the point nearest to the mode: a network's own memory is of nanoseconds.
// This is the eigenvalue problem of the coupled envelopes (a diagonal matrix and one of rank one), solved once for all points, since how
// the modes oscillate freely does not depend on where the source stands.
type coupled struct {
	anchor  [MostModes]int // point nearest to each mode
	pole    [MostModes]complex128
	residue [MostModes]complex128
	// Derivatives of each by all parameters, row by row.
	byPole, byResidue []complex128
	stepped           []complex128 // Newton's steps of one round
}

// rootRounds bounds the search for natural frequencies. A handful is usual; close pairs take a dozen.
const rootRounds = 60

// solve finds the natural frequencies by the method of Ehrlich and Aberth: Newton's step on the polynomial G prod Z for every root at once,
// each repelled by the others, so that no two can end in the same place.
// Source: O. Aberth, Iteration methods for finding all zeros of a polynomial simultaneously, Math. Comp. 27 (1973) 339-344.
func (m *model) solve(params []float64) {
	c, s := &m.coupled, m.s
	c.stepped = grown(c.stepped, MostModes)
	for k := range m.modes {
		a := m.armOf(params, k)
		c.anchor[k] = s.nearest(a.offsetHz)
		i := c.anchor[k]
		y := complex(m.value(params, shuntConductance), s.angular[i]*params[0])
		z := s.source[i] * reciprocal(1+s.source[i]*y)
		c.pole[k] = complex(a.offsetHz-imag(z)/(4*math.Pi*a.inductance), (a.resistance+real(z))/(4*math.Pi*a.inductance))
	}
	// Two modes of the very same parameters would start as one root.
	for k := range m.modes {
		for l := range k {
			if c.pole[k] == c.pole[l] {
				c.pole[k] += complex(0, 1e-3*imag(c.pole[k]))
			}
		}
	}
	for range rootRounds {
		furthest := 0.0
		for k := range m.modes {
			q := c.pole[k]
			g, slope, sum := m.gapAt(params, k, q)
			newton := g * reciprocal(slope+g*sum)
			repelled := complex128(0)
			for l := range m.modes {
				if l != k {
					repelled += reciprocal(q - c.pole[l])
				}
			}
			step := newton * reciprocal(1-newton*repelled)
			c.stepped[k] = step
			furthest = math.Max(furthest, length(step)/(math.Abs(imag(q))+0x1p-50*math.Abs(real(q))))
		}
		for k := range m.modes {
			c.pole[k] -= c.stepped[k]
		}
		if !(furthest > 1e-12) {
			break
		}
	}
	for k := range m.modes {
		_, slope, _ := m.gapAt(params, k, c.pole[k])
		zs := s.source[c.anchor[k]]
		c.residue[k] = -reciprocal(zs * zs * slope)
	}
}

// gapAt returns G and G' at a complex frequency for the network at the anchor of a mode, and sum Z'/Z.
func (m *model) gapAt(params []float64, mode int, q complex128) (g, slope, sum complex128) {
	i := m.coupled.anchor[mode]
	f := complex(m.s.referenceHz, 0) + q
	farad := complex(0, 2*math.Pi*params[0])
	g = reciprocal(m.s.source[i]) + complex(m.value(params, shuntConductance), 0) + farad*f
	slope = farad
	if m.neighbour != nil {
		g += m.neighbour.admittance(m.s.offsetHz[i], m.s.inverse[i])
	}
	inverse := reciprocal(f)
	for k := range m.modes {
		a := m.armOf(params, k)
		d := q - complex(a.offsetHz, 0)
		bend := d * inverse
		jTwoPiL := complex(0, 2*math.Pi*a.inductance)
		y := reciprocal(complex(a.resistance, 0) + jTwoPiL*d*(2-bend))
		dz := jTwoPiL * (2 - bend*(2-bend))
		g += y
		slope -= dz * y * y
		sum += dz * y
	}
	return g, slope, sum
}

// differentiate fills the derivatives of natural frequencies and residues by every parameter, from
//
//	dq = -G_p/G',    dr = (G'_p + G'' dq)/(Zs G')^2
func (m *model) differentiate(params []float64) {
	c := &m.coupled
	width := m.parameters()
	c.byPole, c.byResidue = grown(c.byPole, m.modes*width), grown(c.byResidue, m.modes*width)
	for k := range m.modes {
		byPole, byResidue := c.byPole[k*width:(k+1)*width], c.byResidue[k*width:(k+1)*width]
		clear(byPole)
		clear(byResidue)
		q := c.pole[k]
		f := complex(m.s.referenceHz, 0) + q
		inverse := reciprocal(f)
		// G_p goes to byPole, G'_p to byResidue.
		slope, bend := complex(0, 2*math.Pi*params[0]), complex128(0) // G', G''
		byPole[0], byResidue[0] = complex(0, 2*math.Pi)*f, complex(0, 2*math.Pi)
		if m.conductance {
			byPole[m.column(shuntConductance)] = 1
		}
		for l := range m.modes {
			a := m.armOf(params, l)
			d := q - complex(a.offsetHz, 0)
			u := d * inverse
			jTwoPiL := complex(0, 2*math.Pi*a.inductance)
			r := complex(a.resistance, 0)
			jx := jTwoPiL * d * (2 - u)
			y := reciprocal(r + jx)
			square := y * y
			dz := jTwoPiL * (2 - u*(2-u))                     // Z'
			ddz := -2 * jTwoPiL * inverse * (1 - u) * (1 - u) // Z''
			slope -= dz * square                              // G' of this arm is -Z'/Z^2
			bend += square * (2*dz*dz*y - ddz)                // and G'' follows
			at := m.at(l)
			byFs := -2 * jTwoPiL * (1 - u)               // of Z
			slopeByFs := 2 * jTwoPiL * inverse * (1 - u) // of Z'
			byPole[at], byResidue[at] = -square*byFs, square*(2*dz*byFs*y-slopeByFs)
			byPole[at+1], byResidue[at+1] = -square*r, square*2*dz*r*y
			byPole[at+2], byResidue[at+2] = -square*jx, square*dz*(2*jx*y-1)
		}
		toPole := -reciprocal(slope)
		zs := m.s.source[c.anchor[k]] * slope
		toResidue := reciprocal(zs * zs)
		for p := range width {
			byPole[p] *= toPole
			byResidue[p] = toResidue * (byResidue[p] + bend*byPole[p])
		}
	}
}

// ringArms writes into rung what the free oscillations of all modes add to F.
func (m *model) ringArms(params []float64, derivative bool) {
	m.solve(params)
	rung := m.rung[:m.s.n]
	clear(rung)
	for k := range m.modes {
		m.free[k].resize(m.s.n)
		m.ring.run(m.coupled.pole[k], 0, m.s.n, &m.free[k], derivative, m.stretched)
		r := m.coupled.residue[k]
		for i, v := range m.free[k].value {
			rung[i] += r * v
		}
	}
}

// ringJacobian adds what the free oscillations contribute to the derivatives.
func (m *model) ringJacobian(params, jacobian []float64) {
	m.differentiate(params)
	c := &m.coupled
	n, width := m.s.n, m.parameters()
	scale := m.s.scale[:n]
	for k := range m.modes {
		f := &m.free[k]
		r := c.residue[k]
		for i, v := range f.value {
			f.value[i] = complex(scale[i], 0) * v
		}
		for i, v := range f.byPole {
			f.byPole[i] = complex(scale[i], 0) * r * v
		}
		for p := range width {
			byValue, byPole := c.byResidue[k*width+p], c.byPole[k*width+p]
			if byValue == 0 && byPole == 0 {
				continue
			}
			column := jacobian[2*n*p : 2*n*(p+1)]
			for i, v := range f.value[:n] {
				add := byValue*v + byPole*f.byPole[i]
				column[2*i] += real(add)
				column[2*i+1] += imag(add)
			}
		}
		if m.stretched {
			p := m.column(timeStretch)
			column := jacobian[2*n*p : 2*n*(p+1)]
			for i, v := range f.byStretch[:n] {
				add := complex(scale[i], 0) * r * v
				column[2*i] += real(add)
				column[2*i+1] += imag(add)
			}
		}
	}
}
