package resonance

import "math"

// evaluateRinging is the model of a resonator that has not settled. The current i in the motional arm, driven through the network by a
// source of unit voltage behind the impedance C and with y0 = G0 + j w C0 in parallel, follows
//
//	di/dt = lambda (i - rs),    D = 1 + C y0,    Zp = C/D,    lambda = -g - 2 pi j (f - fs) - j g^2/(4 pi fs),    g = (R1 + Zp(fs))/(2 L1)
//
// to its steady state rs = 1/(D (R1 + Zp + jX)). What rings, rings at fs whatever the source does: seen from the source's phase it turns by f - fs
// exactly, where X/(2 L1) would turn it by (f - fs)(f + fs)/2f, which is off by some 1e-4 five bandwidths away and adds up over a sweep. The last term is what damping takes off the frequency of free ringing,
// some 1e-5 of the bandwidth. The current goes in steps of which timing.transfer gives sample and end. What the network makes of the
// averaged current y is F = (y0 + y)/D, with D(fs) for what rings. State and derivatives of the state by each parameter are carried from point to point.
//
// Further modes would share D and Zp, and their currents would meet in Zp: lambda becomes a matrix and transfer its exponential; nothing
// else here changes.
func (m *forward) evaluateRinging(params, residual, jacobian []float64) {
	p := m.points
	offset, r1, l1, c0 := params[0], math.Exp(params[1]), math.Exp(params[2]), params[3]
	g0, phase := m.value(params, ShuntConductanceSiemens), m.value(params, PhaseRad)
	clock := m.timing
	if m.stretched {
		clock = clock.stretchedBy(math.Exp(m.value(params, logStretch)))
	}
	turnIm, turnRe := math.Sincos(-phase)
	turn := complex(turnRe, turnIm)
	fs := p.referenceHz + offset
	halfL := 1 / (2 * l1)

	// The parameters that move the state: fs, ln R1, ln L1, C0, then G0 and the stretch where they are fitted.
	const most = 6
	var columns [most][]float64
	count := 0
	for _, q := range [...]Parameter{ResonanceHz, LogResistance, LogInductance, ShuntCapacitanceFarad, ShuntConductanceSiemens, logStretch} {
		columns[count] = m.columnOf(jacobian, q)
		if q == ShuntConductanceSiemens && !m.conductance || q == logStretch && !m.stretched {
			continue
		}
		count++
	}
	byPhase := m.columnOf(jacobian, PhaseRad)
	stretchAt, shuntEnd := -1, 4
	if m.conductance {
		shuntEnd = 5
	}
	if m.stretched {
		stretchAt = count - 1
	}

	var state complex128
	var byState [most]complex128
	for i := range p.n {
		d := p.offsetHz[i] - offset
		bend := d * p.inverse[i]
		x := 2 * math.Pi * l1 * d * (2 - bend)
		source := complex(p.sourceRe[i], p.sourceIm[i])
		shunt := complex(g0, p.angular[i]*c0)
		inverseD := reciprocal(1 + source*shunt)
		seen := source * inverseD // Zp
		loop := complex(r1, x) + seen
		steady := inverseD * reciprocal(loop)
		// What rings is loaded by the network at fs, not where the source is.
		inverseRing := reciprocal(1 + source*complex(g0, 2*math.Pi*fs*c0)) // 1/D(fs)
		loading := source * inverseRing
		damping := complex(halfL, 0) * (complex(r1, 0) + loading)
		lambda := -damping - complex(0, 2*math.Pi*d) - damping*damping*complex(0, 1/(4*math.Pi*fs))
		t := clock.transfer(lambda)

		// Derivatives of lambda, and of ln rs: d ln rs = -dD/D - d(loop)/loop.
		var byLambda, bySteady [most]complex128
		if jacobian != nil {
			inverseLoop := reciprocal(loop)
			slope := 4 * math.Pi * l1 * (fs * p.inverse[i]) // -dX/dfs
			byLambda[0] = complex(0, 2*math.Pi)
			bySteady[0] = steady * complex(0, slope) * inverseLoop
			byLambda[1] = complex(-r1*halfL, 0)
			bySteady[1] = -steady * complex(r1, 0) * inverseLoop
			byLambda[2] = damping
			bySteady[2] = -steady * complex(0, x) * inverseLoop
			// By y0: dD = C, dZp = -Zp^2.
			square := seen * seen
			byShunt := loading * loading * complex(halfL, 0)
			steadyByShunt := steady * (square*inverseLoop - seen)
			byLambda[3], bySteady[3] = byShunt*complex(0, 2*math.Pi*fs), steadyByShunt*complex(0, p.angular[i])
			if m.conductance {
				byLambda[4], bySteady[4] = byShunt, steadyByShunt
			}
			byLambda[0] += byShunt * complex(0, 2*math.Pi*c0)
			lower := 1 + damping*complex(0, 1/(2*math.Pi*fs)) // -d lambda/d g
			for k := 1; k < shuntEnd; k++ {
				byLambda[k] *= lower
			}
			if stretchAt >= 0 {
				byLambda[stretchAt] = lambda // times occur only beside lambda
			}
		}
		if i == 0 {
			left, byLeft := clock.start(lambda)
			state = steady * (1 - left)
			for k := range count {
				byState[k] = bySteady[k]*(1-left) - steady*byLeft*byLambda[k]
			}
		}
		away := state - steady
		ring := away * t.mean
		settled := (shunt + steady) * inverseD
		f := settled + ring*inverseRing
		s := p.scale[i]
		sample := complex(p.re[i], p.im[i])
		var turned complex128
		if m.phase {
			turned = complex(p.rawRe[i], p.rawIm[i]) * turn
			sample = turned - complex(p.openRe[i], p.openIm[i])
		}
		e := f - sample
		residual[2*i], residual[2*i+1] = s*real(e), s*imag(e)
		if jacobian == nil {
			state = steady + away*t.end
			continue
		}
		fixed := (1 - source*settled) * inverseD // what y0 does to F at a given y, settled and
		rung := -ring * source * inverseRing * inverseRing
		for k := range count {
			away2 := byState[k] - bySteady[k]
			df := bySteady[k]*inverseD + (away2*t.mean+away*t.byMean*byLambda[k])*inverseRing
			byState[k] = bySteady[k] + away2*t.end + away*t.byEnd*byLambda[k]
			switch {
			case k == 0:
				df += rung * complex(0, 2*math.Pi*c0)
			case k == 3:
				df += fixed*complex(0, p.angular[i]) + rung*complex(0, 2*math.Pi*fs)
			case k > 3 && k < shuntEnd:
				df += fixed + rung
			}
			columns[k][2*i], columns[k][2*i+1] = s*real(df), s*imag(df)
		}
		if byPhase != nil {
			byPhase[2*i], byPhase[2*i+1] = -s*imag(turned), s*real(turned)
		}
		state = steady + away*t.end
	}
}
