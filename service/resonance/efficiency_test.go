package resonance

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// bound returns the Cramer-Rao standard deviations of fs, ln R1, ln C1, C0 and ln Q: the Fisher matrix from central differences of the test's
// own model, in parameters scaled to be of order one, inverted by Gauss-Jordan elimination. Nothing of the package takes part.
func bound(u truth, n fixture, frequencies []float64, rms float64, sample func(fixture, truth, int) complex128) (sd [5]float64) {
	bw := u.bandwidth(n)
	move := func(k int, h float64) truth {
		v := u
		switch k {
		case 0:
			v.fs += h * bw
		case 1:
			v.r1 *= math.Exp(h)
		case 2:
			v.l1 *= math.Exp(h)
		case 3:
			v.c0 *= 1 + h
		}
		return v
	}
	const h = 1e-4
	var fisher [4][8]float64
	for i := range frequencies {
		var d [4]complex128
		for k := range d {
			d[k] = (sample(n, move(k, h), i) - sample(n, move(k, -h), i)) / (2 * h)
		}
		for a := range d {
			for b := range d {
				fisher[a][b] += 2 * (real(d[a])*real(d[b]) + imag(d[a])*imag(d[b])) / (rms * rms)
			}
		}
	}
	for k := range 4 {
		fisher[k][4+k] = 1
	}
	for k := range 4 {
		pivot := fisher[k][k]
		for j := range 8 {
			fisher[k][j] /= pivot
		}
		for i := range 4 {
			if factor := fisher[i][k]; i != k {
				for j := range 8 {
					fisher[i][j] -= factor * fisher[k][j]
				}
			}
		}
	}
	variance := func(g [4]float64) float64 {
		var sum float64
		for a := range 4 {
			for b := range 4 {
				sum += g[a] * fisher[a][4+b] * g[b]
			}
		}
		return math.Sqrt(sum)
	}
	relative := bw / u.fs
	return [5]float64{
		variance([4]float64{bw}), variance([4]float64{0, 1}), variance([4]float64{-2 * relative, 0, -1}),
		variance([4]float64{0, 0, 0, u.c0}), variance([4]float64{relative, -1, 1}),
	}
}

func settledSample(frequencies []float64) func(fixture, truth, int) complex128 {
	return func(n fixture, u truth, i int) complex128 { return n.sample(u.admittance(frequencies[i])) }
}

// errorsOf returns the errors of an estimate in the quantities of bound, and its own standard deviations of them.
func errorsOf(est *Estimate, u truth) (e, sd [5]float64) {
	v, c := est.Value, est.Statistical
	relative := 1 / v[ResonanceHz]
	dfs := v[ResonanceHz] - u.fs
	dr, dl := v[LogResistance]-math.Log(u.r1), v[LogInductance]-math.Log(u.l1)
	e = [5]float64{dfs, dr, -dl - 2*dfs*relative, v[ShuntCapacitanceFarad] - u.c0, dl - dr + dfs*relative}
	gradients := [5][Parameters]float64{{1}, {0, 1}, {-2 * relative, 0, -1}, {0, 0, 0, 1}, {relative, -1, 1}}
	for k, g := range gradients {
		var sum float64
		for i := range g {
			for j := range g {
				sum += g[i] * c[i][j] * g[j]
			}
		}
		sd[k] = math.Sqrt(sum)
	}
	return e, sd
}

// tally gathers errors of estimates in units of the bound, and how many intervals cover the truth.
type tally struct {
	n            int
	sum, squares [5]float64
	covered      [5]int
}

func (c *tally) add(est *Estimate, u truth, limit [5]float64) {
	e, sd := errorsOf(est, u)
	c.n++
	for k := range e {
		r := e[k] / limit[k]
		c.sum[k] += r
		c.squares[k] += r * r
		if math.Abs(e[k]) <= 1.959964*sd[k] {
			c.covered[k]++
		}
	}
}

// check holds the tally against efficiency 1, bias 0 and coverage 95 %, each within five standard deviations of what so many trials scatter by,
// and a part beyond: slack of the ratio, of the bias in standard deviations, and of the coverage.
func (c *tally) check(t *testing.T, name string, slack, bias, coverage float64) {
	t.Helper()
	n := float64(c.n)
	for k, quantity := range [5]string{"fs", "R1", "C1", "C0", "Q"} {
		mean := c.sum[k] / n
		ratio := math.Sqrt(c.squares[k]/n - mean*mean)
		cover := float64(c.covered[k]) / n
		switch {
		case math.Abs(ratio-1) > slack+5/math.Sqrt(2*n):
			t.Errorf("%s, %s: standard deviation %.3f times the bound", name, quantity, ratio)
		case math.Abs(mean) > bias+5/math.Sqrt(n):
			t.Errorf("%s, %s: bias of %.3f standard deviations", name, quantity, mean)
		case math.Abs(cover-0.95) > coverage+5*math.Sqrt(0.95*0.05/n):
			t.Errorf("%s, %s: 95 %% intervals cover %.1f %%", name, quantity, 100*cover)
		}
	}
}

// merge adds another tally.
func (c *tally) merge(o *tally) {
	c.n += o.n
	for k := range c.sum {
		c.sum[k] += o.sum[k]
		c.squares[k] += o.squares[k]
		c.covered[k] += o.covered[k]
	}
}

// TestEfficiency: the five units in their networks, 401 points over five loaded bandwidths either side, reach the Cramer-Rao bound.
func TestEfficiency(t *testing.T) {
	rng := random(t, rand.Uint64())
	trials := 400
	if testing.Short() {
		trials = 60
	}
	var all tally
	for _, p := range parts() {
		bw := p.unit.bandwidth(p.in)
		frequencies := grid(p.unit.fs, 5*bw, 401)
		clean := measured(p.unit, p.in, frequencies)
		for snr := 30.0; snr <= 80; snr += 10 {
			rms := p.unit.peak(p.in) / decibels(snr)
			limit := bound(p.unit, p.in, frequencies, rms, settledSample(frequencies))
			var cell tally
			var f Fitter
			var est Estimate
			for trial := range trials {
				req := noisy(clean, rms, rng)
				if trial%2 == 0 {
					req.NoiseRMS = rms
				}
				if f.Fit(req, &est); est.State != Found {
					t.Fatalf("%s at %g dB: %s %s", p.name, snr, est.State, est.Detail)
				}
				cell.add(&est, p.unit, limit)
			}
			cell.check(t, fmt.Sprintf("%s at %g dB", p.name, snr), 0, 0, 0)
			all.merge(&cell)
		}
	}
	all.check(t, "all together", 0, 0.01, 0)
	for k := range all.sum {
		n := float64(all.n)
		t.Logf("quantity %d: %.4f of the bound, bias %+.4f, coverage %.4f", k, math.Sqrt(all.squares[k]/n), all.sum[k]/n, float64(all.covered[k])/n)
	}
}
