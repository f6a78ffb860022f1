// Package memory keeps inspections, part types and calibrations in memory: the double that tests of the edges stand on, held to the
// same contract as the store on disk. It implements inspection.Recorder, Catalogue, Archive, Publisher and History. It forgets everything when
// the process ends and has no limit, so it is never what a plant records into.
//
// One mutex guards everything. What is handed in is copied and what is handed out is a copy or never changes again, so no caller can
// alter the past.
package memory

import (
	"context"
	"fmt"
	"slices"
	"sync"
	"time"

	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
)

// Store is the store. It is safe for concurrent use.
type Store struct {
	clock inspection.Clock

	mu           sync.Mutex
	records      []*inspection.Record // sequence n at n-1
	sweeps       [][]sweep.Sweep      // beside records
	byID         map[inspection.ID]*inspection.Record
	attempts     map[unitOfType]int
	counts       map[countKey]int64
	partTypes    map[inspection.PartTypeRef]inspection.Published
	calibrations map[inspection.CalibrationID]calibration
	fault        error         // what every write answers with; nil: it works
	news         chan struct{} // closed and replaced by every record
}

type calibration struct {
	kept *network.Calibration
	hash [32]byte
}

// unitOfType is what attempts are counted by: one unit held against one part type, whatever its version, for one purpose.
type unitOfType struct {
	purpose  inspection.Purpose
	serial   inspection.Serial
	lot      inspection.Lot // lot, carrier, pocket: only of a unit without a serial
	carrier  string
	pocket   int
	partType string
}

// countKey is what inspections are counted by. Counts are kept, not computed from records, as the store on disk keeps them.
type countKey struct {
	quarter  int64 // of an hour, of MeasuredAt, since 1970
	station  inspection.StationID
	partType string
	lot      inspection.Lot
	purpose  inspection.Purpose
	verdict  verdict.Verdict
}

// Interface checks: the compiler holds the double to the ports.
var (
	_ inspection.Recorder  = (*Store)(nil)
	_ inspection.Catalogue = (*Store)(nil)
	_ inspection.Archive   = (*Store)(nil)
	_ inspection.Publisher = (*Store)(nil)
	_ inspection.History   = (*Store)(nil)
)

// New returns an empty store that takes its times from the clock.
func New(clock inspection.Clock) *Store {
	return &Store{
		clock:        clock,
		byID:         map[inspection.ID]*inspection.Record{},
		attempts:     map[unitOfType]int{},
		counts:       map[countKey]int64{},
		partTypes:    map[inspection.PartTypeRef]inspection.Published{},
		calibrations: map[inspection.CalibrationID]calibration{},
		news:         make(chan struct{}),
	}
}

// Break makes every later write fail with err, as a full disk (kind Busy) or a failed one (kind Unavailable) would; nil heals it. Reads go
// on working.
func (s *Store) Break(err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.fault = err
}

// Record keeps the record and a copy of its sweeps. What is not whole, or could not be traced to its limits and its calibration, is refused.
func (s *Store) Record(ctx context.Context, r *inspection.Record, sweeps []sweep.Sweep) (inspection.Recorded, error) {
	if err := ctx.Err(); err != nil {
		return inspection.Recorded{}, err
	}
	if err := r.Begin.Check(); err != nil {
		return inspection.Recorded{}, err
	}
	if err := checkSweeps(r.Sweeps, sweeps); err != nil {
		return inspection.Recorded{}, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if first, ok := s.byID[r.Begin.ID]; ok {
		if first.ContentHash != r.ContentHash {
			return inspection.Recorded{}, inspection.Faultf(inspection.Conflict, "inspection", "%s is recorded with other content (hash %x, now %x)",
				r.Begin.ID, first.ContentHash, r.ContentHash)
		}
		return inspection.Recorded{Record: copyOf(first), Already: true}, nil
	}
	if s.fault != nil {
		return inspection.Recorded{}, s.fault
	}
	if err := s.traceable(r); err != nil {
		return inspection.Recorded{}, err
	}
	kept := copyOf(r)
	kept.Sequence = uint64(len(s.records)) + 1
	kept.RecordedAt = s.clock.Now().UTC()
	unit := unitOf(r)
	kept.Attempt = s.attempts[unit] + 1
	if usesAttempt(&r.Judgement) {
		s.attempts[unit]++
	}
	s.counts[countKey{
		quarterOf(r.Begin.MeasuredAt), r.Begin.Station, r.PartType.Name, r.Begin.Unit.Lot, r.Begin.Purpose, r.Judgement.Verdict,
	}]++
	s.records = append(s.records, kept)
	s.sweeps = append(s.sweeps, copySweeps(sweeps))
	s.byID[kept.Begin.ID] = kept
	close(s.news)
	s.news = make(chan struct{})
	return inspection.Recorded{Record: copyOf(kept)}, nil
}

// checkSweeps holds the samples against the headers of the record.
func checkSweeps(headers []inspection.SweepHeader, sweeps []sweep.Sweep) error {
	if len(headers) != len(sweeps) {
		return inspection.Faultf(inspection.Malformed, "sweeps", "want the %d of the record, got %d", len(headers), len(sweeps))
	}
	for i := range sweeps {
		w, n := &sweeps[i], headers[i].Points
		if len(w.FrequencyHz) != n || len(w.Re) != n || (len(w.Im) != n && len(w.Im) != 0) {
			return inspection.Faultf(inspection.Malformed, fmt.Sprintf("sweeps[%d]", i), "want the %d points of its header, got %d frequencies, %d real and %d imaginary parts",
				n, len(w.FrequencyHz), len(w.Re), len(w.Im))
		}
	}
	return nil
}

// traceable reports whether the limits and the calibration that the record was judged by are the published ones. The caller holds mu.
func (s *Store) traceable(r *inspection.Record) error {
	if p, ok := s.partTypes[r.PartType.PartTypeRef]; !ok || p.PartType.Hash() != r.PartType.Hash {
		return inspection.Faultf(inspection.Unknown, "part_type", "version %d of %s with limits file %x is not published", r.PartType.Version, r.PartType.Name, r.PartType.Hash)
	}
	if id := r.Begin.Calibration; id != "" {
		if c, ok := s.calibrations[id]; !ok || c.hash != r.CalibrationHash {
			return inspection.Faultf(inspection.Unknown, "calibration", "%s with content %x is not published", id, r.CalibrationHash)
		}
	}
	return nil
}

// unitOf returns what the record's attempt is counted by.
func unitOf(r *inspection.Record) unitOfType {
	u := r.Begin.Unit
	if u.Serial != "" {
		return unitOfType{purpose: r.Begin.Purpose, serial: u.Serial, partType: r.PartType.Name}
	}
	return unitOfType{purpose: r.Begin.Purpose, lot: u.Lot, carrier: u.Carrier, pocket: u.Pocket, partType: r.PartType.Name}
}

// usesAttempt reports whether the judgement uses up one of the unit's attempts: every one does, save a retest of which the station alone is
// the cause.
func usesAttempt(j *verdict.Judgement) bool {
	if j.Verdict != verdict.Retest || len(j.RetestCauses) == 0 {
		return true
	}
	return slices.ContainsFunc(j.RetestCauses, func(c verdict.RetestCause) bool { return !c.Station })
}

// copyOf returns a copy of the record itself. What it points to is never written after a record is made, here or elsewhere.
func copyOf(r *inspection.Record) *inspection.Record {
	c := *r
	return &c
}

// copySweeps copies the samples too: the caller reuses its buffers.
func copySweeps(sweeps []sweep.Sweep) []sweep.Sweep {
	kept := slices.Clone(sweeps)
	for i := range kept {
		kept[i].FrequencyHz = slices.Clone(kept[i].FrequencyHz)
		kept[i].Re = slices.Clone(kept[i].Re)
		kept[i].Im = slices.Clone(kept[i].Im)
	}
	return kept
}

// quarter is how finely counts are kept.
const quarter = 15 * time.Minute

// quarterOf returns the number of the quarter of an hour that holds t, counted from 1970, rounded down also before it.
func quarterOf(t time.Time) int64 {
	const seconds = int64(quarter / time.Second)
	u := t.Unix()
	q := u / seconds
	if u%seconds < 0 {
		q--
	}
	return q
}
