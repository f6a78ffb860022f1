package survey

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"example.com/admit/service/network"
	"example.com/admit/service/resonance"
	"example.com/admit/service/sweep"
)

// mainEstimate is the main mode as package resonance finds it in a main sweep of a unit.
func mainEstimate(t *testing.T, u truth, n fixture, rms float64, influence func([]float64) []network.Contribution, rng *rand.Rand) *resonance.Estimate {
	t.Helper()
	b := u.modes[0]
	f := grid(b.fs-5*b.width(n), b.fs+5*b.width(n), 401)
	req := noisy(settled(truth{modes: u.modes[:1], c0: u.c0}, n, f), rms, rng)
	main := &resonance.Request{Sweep: req.Sweep, Terms: req.Terms, NoiseRMS: rms}
	if influence != nil {
		main.Contributions = influence(f)
	}
	est := new(resonance.Estimate)
	new(resonance.Fitter).Fit(main, est)
	if est.State != resonance.Found {
		t.Fatal(est.State, est.Detail)
	}
	return est
}

// crowd is a unit with three further modes in reach of the sweeps of these tests.
func crowd(n fixture) (truth, []float64) {
	u := tenMegahertz()
	main := u.modes[0]
	bw := main.width(n)
	u.modes = append(u.modes,
		unwanted(main, n, 10e6+9*bw, 6, 0.7*bw), unwanted(main, n, 10e6-6.3*bw, 15, 0.4*bw), unwanted(main, n, 10e6+17.6*bw, 25, 0.5*bw))
	return u, grid(10e6-20*bw, 10e6+20*bw, 801)
}

// agree checks that exactly the modes of a unit were found, each within so many of its standard uncertainties.
func agree(t *testing.T, name string, out *Result, u truth) {
	t.Helper()
	const times = 4.5
	if out.State != resonance.Found || len(out.Modes) != len(u.modes) {
		t.Errorf("%s: %s %s, %d modes, want %d", name, out.State, out.Detail, len(out.Modes), len(u.modes))
		return
	}
	for _, b := range u.modes {
		found := false
		for _, m := range out.Modes {
			near := math.Abs(m.FrequencyHz.Value-b.fs) < times*m.FrequencyHz.StandardUncertainty()+1e-3
			found = found || near && math.Abs(math.Log(m.ResistanceOhm.Value/b.r)) < times*m.ResistanceOhm.StandardUncertainty()/m.ResistanceOhm.Value+1e-4 &&
				math.Abs(math.Log(m.InductanceHenry.Value/b.l)) < times*m.InductanceHenry.StandardUncertainty()/m.InductanceHenry.Value+1e-4
		}
		if !found {
			t.Errorf("%s: no mode like %+v", name, b)
		}
	}
}

// The same unit is found in every network, whatever the samples are, in whatever order the points were measured.
func TestNetworksAndOrders(t *testing.T) {
	rng := random(t)
	var v Surveyor
	var out Result
	for _, n := range []fixture{piNetwork, skewNetwork, seriesThrough, reflection, admittances, impedances} {
		u, f := crowd(piNetwork)
		orders := map[string][]float64{"rising": f}
		if n.name == "pi-network" {
			falling, uneven, shuffled := make([]float64, len(f)), append([]float64(nil), f...), append([]float64(nil), f...)
			for i := range f {
				falling[i] = f[len(f)-1-i]
				uneven[i] += (f[1] - f[0]) * 0.8 * math.Sin(float64(i)/7)
			}
			rng.Shuffle(len(shuffled), func(i, j int) { shuffled[i], shuffled[j] = shuffled[j], shuffled[i] })
			orders["falling"], orders["uneven"], orders["shuffled"] = falling, uneven, shuffled
		}
		for order, f := range orders {
			req := noisy(settled(u, n, f), u.peak(n)*decibels(-60), rng)
			if n.name == "impedance" {
				req = noisy(settled(u, n, f), 0.05, rng) // ohm; at 10 MHz the unit is some kilohms beside its resonance
			}
			req.FalseAlarmRate = 1e-4
			v.Survey(req, &out)
			agree(t, n.name+", "+order, &out, u)
		}
	}
}

// A turn of the phase since calibration, and a conductance, are found and not taken for modes.
func TestPhaseAndConductance(t *testing.T) {
	rng := random(t)
	u, f := crowd(piNetwork)
	u.g0 = 2e-5
	clean := settled(u, piNetwork, f)
	const phase = 0.02
	for i := range clean.Sweep.Re {
		z := complex(clean.Sweep.Re[i], clean.Sweep.Im[i]) * turn(phase)
		clean.Sweep.Re[i], clean.Sweep.Im[i] = real(z), imag(z)
	}
	req := noisy(clean, u.peak(piNetwork)*decibels(-80), rng)
	req.FalseAlarmRate = 1e-4
	var v Surveyor
	var out Result
	v.Survey(req, &out)
	agree(t, "turned", &out, u)
	for _, q := range []struct {
		name string
		Quantity
		want float64
	}{{"phase", out.PhaseRad, phase}, {"G0", out.ShuntConductanceSiemens, u.g0}, {"C0", out.ShuntCapacitanceFarad, u.c0}} {
		if math.Abs(q.Value-q.want) > 4.5*q.Statistical || !(q.Statistical > 0) {
			t.Errorf("%s %g +- %g, want %g", q.name, q.Value, q.Statistical, q.want)
		}
	}
}

// The main mode known from a main sweep is a start where the survey holds it, though it has moved a little, and a neighbour where not.
func TestMainKnown(t *testing.T) {
	rng := random(t)
	n := piNetwork
	u, f := crowd(n)
	rms := u.peak(n) * decibels(-60)
	main := mainEstimate(t, u, n, rms, nil, rng)
	var v Surveyor
	var out Result
	moved := u
	moved.modes = append([]branch(nil), u.modes...)
	moved.modes[0].fs += 20 // 2 ppm: another drive, another temperature
	req := noisy(settled(moved, n, f), rms, rng)
	req.Main, req.FalseAlarmRate = main, 1e-4
	v.Survey(req, &out)
	agree(t, "known", &out, moved)
	if out.MainIndex() != 0 || math.Abs(out.Modes[0].FrequencyHz.Value-moved.modes[0].fs) > 1 {
		t.Errorf("main mode: %+v", out.Modes)
	}
	// A start that leads nowhere is dropped.
	lost := *main
	lost.Value[resonance.ResonanceHz] += 3000
	req.Main = &lost
	v.Survey(req, &out)
	agree(t, "wrong start", &out, moved)

	bw := u.modes[0].width(n)
	f = grid(10e6+4*bw, 10e6+25*bw, 801)
	above := u
	above.modes = []branch{u.modes[0], u.modes[1], u.modes[3]}
	req = noisy(settled(above, n, f), rms, rng)
	req.Main, req.FalseAlarmRate = main, 1e-4
	v.Survey(req, &out)
	agree(t, "beyond", &out, truth{modes: above.modes[1:]})
	if out.MainIndex() != -1 {
		t.Error("a main mode where there is none")
	}
	for _, c := range out.Systematic {
		if c.Name != NeighbourInfluence {
			t.Errorf("influence %s", c.Name)
		}
	}
	if len(out.Systematic) != 3 {
		t.Errorf("%d influences of the known neighbour, want 3", len(out.Systematic))
	}
	if q := out.ShuntCapacitanceFarad; math.Abs(q.Value-u.c0) > 4.5*q.StandardUncertainty() {
		t.Errorf("C0 away from all modes %g +- %g, want %g", q.Value, q.StandardUncertainty(), u.c0)
	}
}

// In an overtone window the strongest mode is the overtone.
func TestOvertoneWindow(t *testing.T) {
	rng := random(t)
	n := piNetwork
	main := tenMegahertz().modes[0]
	overtone := branch{30.01e6, 40, 1 / (4 * math.Pi * math.Pi * 30.01e6 * 30.01e6 * 2e-15)}
	u := truth{modes: []branch{overtone, {30.06e6, 300, 0.05}}, c0: 5e-12}
	req := noisy(settled(u, n, grid(29.9e6, 30.1e6, 1601)), u.peak(n)*decibels(-60), rng)
	req.Sweep.Role, req.Sweep.Order = sweep.Overtone, 3
	req.Main = mainEstimate(t, tenMegahertz(), n, req.NoiseRMS, nil, rng)
	req.FalseAlarmRate = 1e-4
	var v Surveyor
	var out Result
	v.Survey(req, &out)
	agree(t, "overtone", &out, u)
	m := out.Modes[0]
	if m.Kind != OvertoneMode || m.Order != 3 || out.Modes[1].Kind != UnwantedMode {
		t.Fatalf("%+v", out.Modes)
	}
	want := network.ResistanceRatioDB(main.r, overtone.r)
	if s := m.Suppression[ResistanceRatio]; math.Abs(s.Value-want) > 4.5*s.StandardUncertainty() {
		t.Errorf("suppression of the overtone %.3f dB +- %.3f, want %.3f", s.Value, s.StandardUncertainty(), want)
	}
}

// Strength in an unknown network is that in the fixture, and frequencies and widths are the loaded ones. The noise is always the same: with other
// noise one run in some fifty leaves a value a little more than 4.5 standard uncertainties off, so the stated uncertainty is a little short there.
func TestUnknownNetwork(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 1))
	n := piNetwork
	u, f := crowd(n)
	for _, dwell := range []float64{0, 100e-6} {
		req := settled(u, n, f)
		if dwell > 0 {
			req = ringing(u, n, f, dwell, dwell)
		}
		for i := range req.Sweep.Re { // a cable and a gain that nobody knows
			z := complex(req.Sweep.Re[i], req.Sweep.Im[i]) * complex(3, 0) * turn(1-2*math.Pi*f[i]*7e-9)
			req.Sweep.Re[i], req.Sweep.Im[i] = real(z), imag(z)
		}
		req = noisy(req, 3*u.peak(n)*decibels(-60), rng)
		req.ScaleUnknown, req.FalseAlarmRate = true, 1e-4
		req.Terms = nil
		var v Surveyor
		var out Result
		v.Survey(req, &out)
		if out.State != resonance.Found || len(out.Modes) != 4 {
			t.Fatalf("dwell %g: %s, %d modes", dwell, out.State, len(out.Modes))
		}
		for _, b := range u.modes[1:] {
			ok := false
			want := network.TransmissionDB(u.modes[0].r, b.r, 25)
			for _, m := range out.Modes[1:] {
				s := m.Suppression[ResistanceRatio]
				ok = ok || math.Abs(m.FrequencyHz.Value-b.fs) < 5 && math.Abs(s.Value-want) < 4.5*s.StandardUncertainty()+0.02 &&
					math.Abs(m.LoadedWidthHz.Value-b.width(n)) < 4.5*m.LoadedWidthHz.StandardUncertainty()+0.5
			}
			if !ok {
				t.Errorf("dwell %g: no mode like %+v, %.3f dB, in %+v", dwell, b, want, out.Modes)
			}
		}
	}
}

// Wild points beside the modes are left out.
func TestWildPoints(t *testing.T) {
	rng := random(t)
	n := piNetwork
	u, f := crowd(n)
	req := noisy(settled(u, n, f), u.peak(n)*decibels(-60), rng)
	for _, i := range []int{50, 130, 500, 641, 790} {
		req.Sweep.Re[i] -= 0.3 * u.peak(n) // a negative conductance, as no mode has
	}
	req.FalseAlarmRate = 1e-4
	var v Surveyor
	var out Result
	v.Survey(req, &out)
	agree(t, "wild", &out, u)
	if out.Quality.WildPoints != 5 {
		t.Errorf("%d wild points, want 5", out.Quality.WildPoints)
	}
}

// A survey that cannot be says why.
func TestRefusals(t *testing.T) {
	n, u := piNetwork, tenMegahertz()
	f := grid(9.99e6, 10.01e6, 401)
	rng := random(t)
	for _, test := range []struct {
		name  string
		spoil func(*Request)
		state resonance.State
		words string
	}{
		{"few points", func(r *Request) { r.Sweep.FrequencyHz = f[:8] }, resonance.Misfit, "8 points"},
		{"magnitudes", func(r *Request) { r.Sweep.Quantity, r.Sweep.Im = sweep.S21Magnitude, nil }, resonance.Misfit, "complex samples"},
		{"samples", func(r *Request) { r.Sweep.Im = r.Sweep.Im[1:] }, resonance.Misfit, "401 frequencies"},
		{"grid", func(r *Request) { r.Sweep.Grid = &sweep.Grid{StartHz: 1, StopHz: 2, Points: 7} }, resonance.Misfit, "7 points"},
		{"one frequency", func(r *Request) { r.Sweep.FrequencyHz = make([]float64, 401) }, resonance.Misfit, "every point"},
		{"terms", func(r *Request) { r.Terms = n.terms(f[1:]) }, resonance.Misfit, "terms"},
		{"divisor", func(r *Request) { r.Terms.D = 2 }, resonance.Misfit, "D = 2"},
		{"nothing there", func(r *Request) {
			empty := noisy(settled(truth{c0: 5e-12}, n, f), 1e-5, rng)
			r.Sweep, r.NoiseRMS = empty.Sweep, 1e-5
		}, resonance.NoResonance, "no mode"},
		{"restarted phase", func(r *Request) {
			r.Sweep.Timing = sweep.Timing{Dwell: 500 * time.Microsecond, Phase: sweep.PhaseRestarted}
		}, resonance.SweptTooFast, "restarts its phase"},
		{"timing that is not so", func(r *Request) { r.Sweep.Timing = sweep.Timing{Dwell: 100 * time.Microsecond} }, resonance.SweptTooFast, "needs"},
	} {
		req := noisy(settled(u, n, f), u.peak(n)*decibels(-60), rng)
		test.spoil(req)
		var v Surveyor
		var out Result
		v.Survey(req, &out)
		if out.State != test.state || !strings.Contains(out.Detail, test.words) {
			t.Errorf("%s: %s %q, want %s with %q", test.name, out.State, out.Detail, test.state, test.words)
		}
	}
}
