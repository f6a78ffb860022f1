package inspection_test

import (
	"encoding/binary"
	"math"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"example.com/admit/fixtures/simulated"
	"example.com/admit/service/crystal"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
	"example.com/admit/storage/memory"
)

type wallClock struct{}

func (wallClock) Now() time.Time { return time.Now() }

type deaf struct{}

func (deaf) Judged(*inspection.Record, time.Duration)       {}
func (deaf) Recorded(*inspection.Record, time.Duration)     {}
func (deaf) Rejected(inspection.StationID, inspection.Kind) {}

// shift is a floor with a store: what is inspected there is recorded, and has a history.
type shift struct {
	*floor
	store *memory.Store
	desk  *inspection.Desk
	made  uint64
}

func newShift(t *testing.T, kind int, seed uint64, sections string) *shift {
	t.Helper()
	s := &shift{floor: newFloor(t, kind, seed, sections), store: memory.New(wallClock{})}
	s.desk = &inspection.Desk{
		Judge: s.judge, Recorder: s.store, Catalogue: s.store, Clock: wallClock{}, Observer: deaf{}, Recollection: inspection.NewRecollection(s.store),
	}
	if _, _, err := s.store.PublishPartType(t.Context(), s.base.PartType, "engineer"); err != nil {
		t.Fatal(err)
	}
	if _, err := s.store.PublishCalibration(t.Context(), s.base.Calibration, "N1"); err != nil {
		t.Fatal(err)
	}
	return s
}

// take inspects and records what the sweeps show of a unit.
func (s *shift) take(serial string, sweeps []sweep.Sweep, change ...func(*inspection.Begin)) *inspection.Record {
	s.Helper()
	b := s.base.Begin
	s.made++
	binary.BigEndian.PutUint32(b.ID[12:], uint32(s.made))
	b.Unit.Serial = inspection.Serial(serial)
	for _, c := range change {
		c(&b)
	}
	session, err := s.desk.Open(s.Context(), b, "station N1")
	if err != nil {
		s.Fatal(err)
	}
	for _, w := range sweeps {
		if err := session.Add(w); err != nil {
			s.Fatal(err)
		}
	}
	r, _, err := session.End(s.Context(), [32]byte{})
	if err != nil {
		s.Fatal(err)
	}
	kept, err := session.Record(s.Context(), r)
	if err != nil {
		s.Fatal(err)
	}
	// What was recorded is enough to judge again, to the last bit.
	again := s.with(sweeps...)
	again.Begin, again.Background = b, kept.Record.Background
	if j := s.inspect(again); !cmp.Equal(*j, kept.Record.Judgement) {
		s.Errorf("judged again from its record, %s differs:\n%s", serial, cmp.Diff(*j, kept.Record.Judgement))
	}
	return kept.Record
}

// mainOf returns one main sweep of an insert.
func (s *shift) mainOf(in simulated.Insert) []sweep.Sweep {
	return []sweep.Sweep{s.MeasureAt(in, s.Window(401), sweep.Main, 0, s.SourcePowerDBm)}
}

// draw returns a sound unit with the spread of a lot.
func (s *shift) draw() simulated.Insert {
	p := simulated.Population{Kind: s.Kind, Rand: s.Rand}
	return p.Make(simulated.Sound)
}

const atLimit = `
limits:
  motional_resistance: {max: 18.1 ohm}
decision: {rule: guarded-both, confidence: 0.95, attempts: 3, after_last_attempt: `

// TestAttemptsAreJudgedTogether: a unit just below its limit is judged on the mean of all its readings; what they have in common stays, what is new at
// each insertion averages out; after the last attempt it goes where the part type says.
func TestAttemptsAreJudgedTogether(t *testing.T) {
	for after, want := range map[string]struct {
		verdict     verdict.Verdict
		disposition verdict.Disposition
		advice      string
	}{"set-aside": {verdict.Retest, verdict.SetAside, "Set the unit aside"}, "fail": {verdict.Fail, verdict.Failed, "failed"}} {
		s := newShift(t, 2, 31, atLimit+after+"}\n")
		var sum, individual, common float64
		for n := 1; n <= 3; n++ {
			in := s.Insert(s.nominal(nil), 0.05)
			sweeps := s.mainOf(in)
			alone := finding(s.inspect(s.with(sweeps...)), parttype.MotionalResistance, -1)
			own := math.Sqrt(math.Pow(alone.Measured.StandardUncertainty, 2) - math.Pow(alone.CommonUncertainty, 2))
			sum, individual, common = sum+alone.Measured.Value, math.Hypot(individual, own), common+alone.CommonUncertainty
			if alone.Readings != 1 || own < 0.05 || own > 0.06 || alone.CommonUncertainty < 0.08 {
				t.Errorf("alone: %+v, individual part %.3f", alone, own)
			}
			r := s.take("TM0000001", sweeps)
			f := finding(&r.Judgement, parttype.MotionalResistance, -1)
			k := float64(n)
			if f.Readings != n || math.Abs(f.Measured.Value-sum/k) > 1e-9 || math.Abs(f.Measured.StandardUncertainty-math.Hypot(individual/k, common/k)) > 1e-9 {
				t.Errorf("attempt %d: %+v, want the mean %.4f", n, f, sum/k)
			}
			j := &r.Judgement
			if n < 3 && (j.Verdict != verdict.Retest || j.Disposition != "" || r.Background.AttemptsUsed != n-1) {
				t.Errorf("attempt %d: %s", n, told(j))
			}
			if n == 3 && (j.Verdict != want.verdict || j.Disposition != want.disposition || !strings.Contains(strings.Join(j.Advice(), " "), want.advice) || !strings.Contains(f.Text, "mean of 3 readings")) {
				t.Errorf("after the last attempt, %s: %s, advice %q", after, told(j), j.Advice())
			}
		}
		// A fourth look accepts nothing, not even a reading far inside the limit, of which the mean conforms.
		r := s.take("TM0000001", s.mainOf(s.nominal(func(m *crystal.Mode, _ *crystal.Unit) { m.ResistanceOhm = 12 })))
		if r.Judgement.Verdict == verdict.Pass || r.Judgement.Disposition != want.disposition {
			t.Errorf("a fourth attempt: %s", told(&r.Judgement))
		}
	}
}

// TestWhatUsesNoAttempt: the station's own faults, and what is not production.
func TestWhatUsesNoAttempt(t *testing.T) {
	s := newShift(t, 2, 32, atLimit+"set-aside}\n")
	unlocked := func(b *inspection.Begin) { no := false; b.ReferenceLock = &no }
	study := func(b *inspection.Begin) { b.Purpose = inspection.Study }
	clear := s.nominal(func(m *crystal.Mode, _ *crystal.Unit) { m.ResistanceOhm = 15 })
	for n, c := range []struct {
		name   string
		in     simulated.Insert
		change []func(*inspection.Begin)
		used   int // before it
		means  int // readings in the finding
	}{
		{"undecided", s.nominal(nil), nil, 0, 1},
		{"a study looks at it", s.nominal(nil), []func(*inspection.Begin){study}, 0, 1},
		{"undecided again", s.nominal(nil), nil, 1, 2},
		{"far inside: passes", clear, nil, 2, 3},
		{"after a pass all begins anew", s.nominal(nil), nil, 0, 1},
	} {
		r := s.take("TM0000002", s.mainOf(c.in), c.change...)
		f := finding(&r.Judgement, parttype.MotionalResistance, -1)
		if r.Background.AttemptsUsed != c.used || f.Readings != c.means {
			t.Errorf("%d, %s: %d attempts used, %d readings: %s", n, c.name, r.Background.AttemptsUsed, f.Readings, told(&r.Judgement))
		}
	}
	// The limits of this part type are none of frequency: an unlocked reference suspends nothing, and alone it is the station's.
	first := s.take("TM0000003", s.mainOf(clear), unlocked)
	second := s.take("TM0000003", s.mainOf(clear))
	if first.Judgement.Verdict != verdict.Retest || second.Background.AttemptsUsed != 0 || second.Judgement.Verdict != verdict.Pass {
		t.Errorf("first %s, then with %d used %s", told(&first.Judgement), second.Background.AttemptsUsed, told(&second.Judgement))
	}
}

// TestLowDriveOverAttempts: high, high again, and good when it is too late.
func TestLowDriveOverAttempts(t *testing.T) {
	s := newShift(t, 2, 33, driveSection)
	for n, c := range []struct {
		in   simulated.Insert
		want verdict.Verdict
	}{{s.sleeping(8), verdict.Retest}, {s.sleeping(8), verdict.Fail}, {s.nominal(nil), verdict.Fail}} {
		r := s.take("TM0000001", s.series(c.in))
		if r.Judgement.Verdict != c.want || !strings.Contains(causes(&r.Judgement), string(verdict.HighResistanceAtLowDrive)) {
			t.Errorf("attempt %d: want %s, got %s", n+1, c.want, told(&r.Judgement))
		}
	}
	// A unit that was badly seated once and reads well afterwards passes.
	bad := s.nominal(func(m *crystal.Mode, _ *crystal.Unit) { m.ResistanceOhm += 100 })
	if r := s.take("TM0000002", s.series(bad)[:1]); causes(&r.Judgement) != string(verdict.HighResistanceAtLowDrive) || len(r.Judgement.Advice()) == 0 {
		t.Errorf("badly seated: %s", told(&r.Judgement))
	}
	if r := s.take("TM0000002", s.series(s.draw())); r.Judgement.Verdict != verdict.Pass {
		t.Errorf("seated again: %s", told(&r.Judgement))
	}
}

// TestWhichUnit: two units in one contact head, and one that was not taken out, are told by what was measured before.
func TestWhichUnit(t *testing.T) {
	for kind := range simulated.Scenario() {
		s := newShift(t, kind, 34, "")
		var last simulated.Insert
		for n := range 8 {
			last = s.draw()
			if r := s.take(string(rune('A'+n)), s.mainOf(last)); r.Judgement.Verdict != verdict.Pass {
				t.Fatalf("%s, unit %d: %s", s.Kind.PartType, n, told(&r.Judgement))
			}
		}
		again := s.Insert(last, 0.05)
		if r := s.take("H", s.mainOf(again)); r.Judgement.Verdict != verdict.Pass {
			t.Errorf("%s, the same unit under its own name: %s", s.Kind.PartType, told(&r.Judgement))
		}
		if r := s.take("I", s.mainOf(s.Insert(last, 0.05))); causes(&r.Judgement) != string(verdict.SameUnitAgain) || r.Judgement.Verdict != verdict.Retest {
			t.Errorf("%s, the same unit under another name: %s", s.Kind.PartType, told(&r.Judgement))
		}
		a := s.Kind.Nominal()
		b := a
		b.Modes = []crystal.Mode{a.Modes[0]}
		b.Modes[0].ResonanceHz *= 1 + 0.02*s.Kind.LoadedBandwidthHz()/s.Kind.ResonanceHz()
		r := s.take("J", s.mainOf(simulated.Insert{Unit: simulated.Parallel(a, b)}))
		if !strings.Contains(causes(&r.Judgement), string(verdict.TwoUnits)) || r.Judgement.Verdict != verdict.Retest {
			t.Errorf("%s, two units: %s", s.Kind.PartType, told(&r.Judgement))
		}
		// Another desk, with no memory of the day, learns the same from the store.
		s.desk.Recollection = inspection.NewRecollection(s.store)
		if r := s.take("K", s.mainOf(s.draw())); r.Background.Lot == nil || r.Background.Lot.Units < 8 || r.Background.Previous == nil || r.Background.Previous.Unit.Serial != "J" || r.Judgement.Verdict != verdict.Pass {
			t.Errorf("%s, after a restart: %+v %s", s.Kind.PartType, r.Background, told(&r.Judgement))
		}
	}
}

// TestStrangersAreNotTaken: of units of one lot, drawn one after the other, none is taken for the one before it or for two.
func TestStrangersAreNotTaken(t *testing.T) {
	s := newShift(t, 2, 35, "")
	units := 300
	if testing.Short() {
		units = 60
	}
	for n := range units {
		r := s.take("S"+string(rune('A'+n%26))+string(rune('a'+n/26)), s.mainOf(s.draw()))
		if c := causes(&r.Judgement); strings.Contains(c, string(verdict.SameUnitAgain)) || strings.Contains(c, string(verdict.TwoUnits)) {
			t.Errorf("unit %d: %s", n, told(&r.Judgement))
		}
	}
}
