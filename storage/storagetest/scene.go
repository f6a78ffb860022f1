package storagetest

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// The part types of the scene, invented ones of the Tarnmoor works. Both allow two attempts.
const (
	partTypeName  = "TM-25M000-F10"
	otherTypeName = "TM-12M288-F16"
)

// limitsFile returns a limits file; comment makes another file of the same limits.
func limitsFile(name string, version int, comment string) []byte {
	return fmt.Appendf(nil, `# %s
part_type: %s
version: %d
vibration_mode: thickness-shear
overtone: 1
nominal_frequency: 25 MHz
circuit_condition: {load_capacitance: 10 pF, load_connection: series}
drive_level: 10 uW
maximum_drive_level: 200 uW
limits:
  frequency_deviation_ppm: {of: load_resonance, min: -10, max: 10}
  motional_resistance: {max: 40 ohm}
decision: {rule: guarded-acceptance, confidence: 0.95, attempts: 2, after_last_attempt: set-aside}
`, comment, name, version)
}

// PartType returns a part type of the scene that allows two attempts and then sets the unit aside.
func PartType(t testing.TB, name string, version int, comment string) *parttype.PartType {
	t.Helper()
	p, err := parttype.Parse(name+".yaml", limitsFile(name, version, comment))
	if err != nil {
		t.Fatal(err)
	}
	return p
}

// Calibration returns a calibration of a pi-network with three standards that could be real; nobody solves it here.
func Calibration(id, head string) *network.Calibration {
	c := &network.Calibration{
		ID: id, ContactHead: head, Network: network.PiNetwork, ReferenceImpedanceOhm: 50, NominalTerminationOhm: 25,
		TakenAt: day.Add(-3 * time.Hour), ValidFor: 24 * time.Hour, TemperatureC: ptr(24.8),
		ReceiverNoise:            &network.ReceiverNoise{RMS: 3.6e-6, SourcePowerDBm: ptr(-2.2), Averaging: 500 * time.Microsecond},
		SourceLevelUncertaintyDB: 0.1, DriftGainDB: 0.02, DriftPhaseDeg: 0.1, ContactUncertaintyOhm: 0.05, ReferenceClockUncertaintyPPM: 0.02,
		Standards: []network.Standard{
			{Kind: network.Open, CapacitanceFarad: 1e-15, CapacitanceUncertaintyFarad: 5e-15}, {Kind: network.Short, InductanceHenry: 1e-10},
			{Kind: network.Load, ResistanceOhm: 25, ResistanceUncertaintyOhm: 0.02},
		},
	}
	for i := range c.Standards {
		s := &c.Standards[i]
		for k := range 11 {
			s.FrequencyHz = append(s.FrequencyHz, 24.9e6+1e4*float64(k)+1.0/3)
			s.Re, s.Im = append(s.Re, 0.5*float64(i)+1.0/7), append(s.Im, math.Copysign(0.01*float64(k), -1))
		}
	}
	return c
}

// day is the morning of the scene.
var day = time.Date(2026, 11, 30, 9, 0, 0, 0, time.UTC)

// Plant makes inspections as the stations of one plant would send them.
type Plant struct {
	Types      map[string]*parttype.PartType // by name, version 1
	Calibrated *network.Calibration          // of contact head N1-A

	made uint64
}

// NewPlant returns a plant whose part types and calibration are published in the backend.
func NewPlant(t testing.TB, b Backend) *Plant {
	t.Helper()
	p := &Plant{Types: map[string]*parttype.PartType{}, Calibrated: Calibration("N1-A-2026-11-30", "N1-A")}
	for _, name := range []string{partTypeName, otherTypeName} {
		p.Types[name] = PartType(t, name, 1, "first")
		if _, already, err := b.PublishPartType(t.Context(), p.Types[name], "engineer"); err != nil || already {
			t.Fatalf("publishing %s: already %v, error %v", name, already, err)
		}
	}
	if already, err := b.PublishCalibration(t.Context(), p.Calibrated, "N1"); err != nil || already {
		t.Fatalf("publishing a calibration: already %v, error %v", already, err)
	}
	return p
}

// Inspection is one inspection as it comes to a Recorder.
type Inspection struct {
	Record *inspection.Record
	Sweeps []sweep.Sweep
}

// newID returns a UUID of version 7, whose time is that of the scene.
func newID(n uint64) (id inspection.ID) {
	binary.BigEndian.PutUint64(id[:8], uint64(day.UnixMilli()+int64(n))<<16)
	id[6], id[8] = 0x70, 0x80
	binary.BigEndian.PutUint32(id[12:], uint32(n))
	return id
}

// Inspection makes a passed inspection of a unit of its own, a second after the one before. change may alter what is said of it; the rest
// follows from that.
func (p *Plant) Inspection(change func(*inspection.Begin)) Inspection {
	p.made++
	b := inspection.Begin{
		ID: newID(p.made), Purpose: inspection.Production, Unit: inspection.UnitID{Serial: inspection.Serial(fmt.Sprintf("TM%07d", p.made)), Lot: "L2601"},
		Station: "N1", ContactHead: "N1-A", Operator: "op-17", PartType: inspection.PartTypeRef{Name: partTypeName},
		Calibration: "N1-A-2026-11-30", MeasuredAt: day.Add(time.Duration(p.made) * time.Second),
	}
	if change != nil {
		change(&b)
	}
	return p.of(b, []sweep.Sweep{mainSweep(int(p.made))}, verdict.Judgement{Verdict: verdict.Pass, Remarks: []string{"sound"}})
}

// of makes an inspection of given content, judged under version 1 of its part type.
func (p *Plant) of(b inspection.Begin, sweeps []sweep.Sweep, j verdict.Judgement) Inspection {
	r := inspection.NewRecord(&inspection.Case{Begin: b, PartType: p.Types[b.PartType.Name], Calibration: p.Calibrated, Sweeps: sweeps}, j)
	r.ContentHash = inspection.ContentHash(&b, sweeps)
	if b.Calibration != "" {
		r.CalibrationHash = inspection.CalibrationHash(p.Calibrated)
	}
	r.Software, r.Caller = "revision 1", "station.n1.example"
	return Inspection{r, sweeps}
}

// Retest makes the inspection a retest for the given causes.
func (m Inspection) Retest(causes ...verdict.Cause) Inspection {
	j := verdict.Judgement{Verdict: verdict.Retest}
	for _, c := range causes {
		j.RetestCauses = append(j.RetestCauses, verdict.NewCause(c, "as the test wants it"))
	}
	m.Record.Judgement = j
	return m
}

// Fail makes the inspection a failed one.
func (m Inspection) Fail() Inspection {
	m.Record.Judgement = verdict.Judgement{Verdict: verdict.Fail}
	return m
}

// mainSweep returns 41 points on a grid, with digits of noise.
func mainSweep(seed int) sweep.Sweep {
	w := sweep.Sweep{
		Role: sweep.Main, Quantity: sweep.S21, SourcePowerDBm: ptr(-2.2), Grid: &sweep.Grid{StartHz: 24.99e6, StopHz: 25.01e6, Points: 41},
		Timing: sweep.Timing{Dwell: 2 * time.Millisecond, Averaging: 500 * time.Microsecond, Phase: sweep.PhaseContinuous},
	}
	for i := range w.Grid.Points {
		w.FrequencyHz = append(w.FrequencyHz, w.Grid.At(i))
		w.Re, w.Im = append(w.Re, math.Sin(float64(seed*41+i))), append(w.Im, math.Cos(float64(seed+i*7)))
	}
	return w
}

// scene is a backend and the plant that uses it.
type scene struct {
	*testing.T
	Backend
	*Plant
}

func newScene(t *testing.T, open func(t *testing.T) Backend) *scene {
	b := open(t)
	return &scene{T: t, Backend: b, Plant: NewPlant(t, b)}
}

// keep records and wants it to be new.
func (s *scene) keep(m Inspection) *inspection.Record {
	s.Helper()
	kept, err := s.Record(s.Context(), m.Record, m.Sweeps)
	if err != nil {
		s.Fatalf("recording %s: %v", m.Record.Begin.ID, err)
	}
	if kept.Already {
		s.Fatalf("recording %s: said to be recorded already", m.Record.Begin.ID)
	}
	return kept.Record
}

// find wants the record to be there.
func (s *scene) find(id inspection.ID) *inspection.Record {
	s.Helper()
	r, ok, err := s.Find(s.Context(), id)
	if err != nil || !ok {
		s.Fatalf("finding %s: ok %v, error %v", id, ok, err)
	}
	return r
}

// refused wants an error of a kind.
func (s *scene) refused(what string, err error, kind inspection.Kind, words ...string) {
	s.Helper()
	var f *inspection.Fault
	if !errors.As(err, &f) || f.Kind != kind {
		s.Errorf("%s: got error %v, want a fault of kind %v", what, err, kind)
		return
	}
	for _, w := range words {
		if !strings.Contains(err.Error(), w) {
			s.Errorf("%s: the error %q does not say %q", what, err, w)
		}
	}
}

// diff compares floats by their bits and treats empty and absent lists alike; "" says that the two are the same.
func diff(want, got any) string {
	bits := cmp.Comparer(func(a, b float64) bool { return math.Float64bits(a) == math.Float64bits(b) })
	return cmp.Diff(want, got, bits, cmpopts.EquateEmpty())
}

func (s *scene) same(what string, want, got any) {
	s.Helper()
	if d := diff(want, got); d != "" {
		s.Errorf("%s differs (-want +got):\n%s", what, d)
	}
}

// as returns what a record should come back as: as it was sent, with what is known when it is recorded.
func (m Inspection) as(kept *inspection.Record) *inspection.Record {
	r := *m.Record
	r.Sequence, r.RecordedAt, r.Attempt = kept.Sequence, kept.RecordedAt, kept.Attempt
	return &r
}

func sequences(records []*inspection.Record) []uint64 {
	list := make([]uint64, 0, len(records))
	for _, r := range records {
		list = append(list, r.Sequence)
	}
	return list
}

func ptr[T any](v T) *T { return &v }
