package inspection

import (
	"context"
	"fmt"
	"time"

	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// Judger forms the judgement on one inspection. It must be safe for concurrent use, keep nothing of the case, and give the same answer
// to the same case every time. An error is a defect or the end of the context; a measurement that cannot be judged is a judgement, retest.
type Judger interface {
	Judge(ctx context.Context, c *Case) (verdict.Judgement, error)
}

// Desk receives inspections: it resolves what they name, judges them and has them recorded. It is safe for concurrent use.
type Desk struct {
	Judge        Judger
	Recorder     Recorder
	Recollection *Recollection // nil: every inspection is judged as if it were the first
	Catalogue    Catalogue
	Clock        Clock
	Observer     Observer
	Software     string // revision, kept with every record

	programmes programmes
}

// HeardBy returns a desk like this one with another observer.
func (d *Desk) HeardBy(o Observer) *Desk {
	return &Desk{Judge: d.Judge, Recorder: d.Recorder, Recollection: d.Recollection, Catalogue: d.Catalogue, Clock: d.Clock, Observer: o, Software: d.Software}
}

// Session is one inspection on its way in. It is used by one goroutine.
type Session struct {
	desk   *Desk
	caller string
	c      Case
	hash   [32]byte // of the calibration
	last   time.Time
}

// Limits of one inspection, told in every error about them.
const (
	MaxSweeps = 64      // sweeps of one inspection
	MaxText   = 128     // bytes of a name: serial, lot, carrier, station, operator, ...
	MaxSample = 1000000 // points of all sweeps together
)

// Open checks what is said of an inspection and resolves its part type and calibration.
func (d *Desk) Open(ctx context.Context, b Begin, caller string) (*Session, error) {
	if err := b.Check(); err != nil {
		return nil, err
	}
	pt, err := d.Catalogue.PartType(ctx, b.PartType.Name, b.PartType.Version)
	if err != nil {
		return nil, err
	}
	s := &Session{desk: d, caller: caller, c: Case{Begin: b, PartType: pt}}
	if b.Calibration != "" {
		if s.c.Calibration, s.hash, err = d.Catalogue.Calibration(ctx, b.Calibration); err != nil {
			return nil, err
		}
	}
	if b.Offline == nil { // what a station judged by itself has been measured, and waits for nobody
		if err := CheckReach(s.c.PartType, s.c.Calibration); err != nil {
			return nil, err
		}
	}
	return s, nil
}

// Announce checks the header of a sweep before its samples arrive: a source power that could drive a unit beyond the part type's maximum is a
// Fault of kind Malformed. Add checks it again; to call Announce is to know earlier.
func (s *Session) Announce(w *sweep.Sweep) error {
	return checkCeiling(s.c.PartType, s.c.Calibration, w, fmt.Sprintf("sweeps[%d]", len(s.c.Sweeps)))
}

// Add takes one whole sweep. The session keeps it.
func (s *Session) Add(w sweep.Sweep) error {
	if len(s.c.Sweeps) >= MaxSweeps {
		return Faultf(Malformed, "sweeps", "at most %d sweeps in one inspection, this is one more", MaxSweeps)
	}
	total := w.Points()
	for i := range s.c.Sweeps {
		total += s.c.Sweeps[i].Points()
	}
	if total > MaxSample {
		return Faultf(Malformed, "sweeps", "at most %d points in one inspection, got %d", MaxSample, total)
	}
	if faults := w.Check(); len(faults) > 0 {
		return Faultf(Malformed, fmt.Sprintf("sweeps[%d]", len(s.c.Sweeps)), "%w", faults[0])
	}
	if err := s.Announce(&w); err != nil {
		return err
	}
	s.c.Sweeps = append(s.c.Sweeps, w)
	s.last = s.desk.Clock.Now()
	return nil
}

// Points returns the number of points received so far.
func (s *Session) Points() int {
	total := 0
	for i := range s.c.Sweeps {
		total += s.c.Sweeps[i].Points()
	}
	return total
}

// End judges the inspection. A content hash given by the sender (not all zero) must be that of what arrived. An inspection that is
// already recorded gets its first record back, with already true, and is not judged again.
func (s *Session) End(ctx context.Context, sent [32]byte) (r *Record, already bool, err error) {
	sum := ContentHash(&s.c.Begin, s.c.Sweeps)
	if sent != [32]byte{} && sent != sum {
		return nil, false, Faultf(Malformed, "content_sha256", "the content that arrived has hash %x, the sender stated %x", sum, sent)
	}
	first, ok, err := s.desk.Recorder.Find(ctx, s.c.Begin.ID)
	if err != nil {
		return nil, false, err
	}
	if ok {
		if first.ContentHash != sum {
			return nil, false, Faultf(Conflict, "inspection", "%s is recorded with other content (hash %x, now %x)", s.c.Begin.ID, first.ContentHash, sum)
		}
		return first, true, nil
	}
	start := s.desk.Clock.Now()
	if s.c.Background, err = s.desk.Recollection.background(ctx, &s.c); err != nil {
		return nil, false, err
	}
	j, err := s.desk.Judge.Judge(ctx, &s.c)
	if err != nil {
		return nil, false, err
	}
	r = NewRecord(&s.c, j)
	r.ContentHash, r.CalibrationHash, r.Software, r.Caller = sum, s.hash, s.desk.Software, s.caller
	s.desk.Observer.Judged(r, max(0, s.desk.Clock.Now().Sub(start)))
	return r, false, nil
}

// Record has the judged inspection recorded and returns the record as it is kept.
func (s *Session) Record(ctx context.Context, r *Record) (Recorded, error) {
	kept, err := s.desk.Recorder.Record(ctx, r, s.c.Sweeps)
	if err != nil {
		return Recorded{}, err
	}
	if !kept.Already {
		s.desk.Recollection.add(kept.Record)
		s.desk.Observer.Recorded(kept.Record, max(0, s.desk.Clock.Now().Sub(s.last)))
	}
	return kept, nil
}

// NewRecord returns the record of a judged case; hashes, software and caller are the caller's to fill in.
func NewRecord(c *Case, j verdict.Judgement) *Record {
	r := &Record{
		Begin:      c.Begin,
		PartType:   Applied{PartTypeRef{c.PartType.Name, c.PartType.Version}, c.PartType.Hash()},
		Background: c.Background,
		Judgement:  j,
	}
	for i := range c.Sweeps {
		r.Sweeps = append(r.Sweeps, HeaderOf(&c.Sweeps[i]))
	}
	return r
}

// HeaderOf returns the sweep without its samples.
func HeaderOf(w *sweep.Sweep) SweepHeader {
	h := SweepHeader{Sweep: *w, Points: w.Points()}
	h.FrequencyHz, h.Re, h.Im = nil, nil, nil
	return h
}
