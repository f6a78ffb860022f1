package storage

import (
	"context"
	"encoding/binary"
	"fmt"
	"log/slog"
	"slices"
	"strconv"
	"time"

	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/sweep"
	"example.com/admit/service/verdict"
	"example.com/admit/service/wire"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
)

// What a record of a volume holds, for whoever decodes it without this program (package volume draws the frame around it):
//
//	payload        message admit.v1.Inspection in protobuf encoding, fields in the order of their numbers
//	tested         begin.measured_at
//	content hash   content_sha256
//	objects        kind "part-type": the limits file, byte for byte; kind "calibration": message admit.v1.Calibration with samples.
//	               The hash of a part type is the one that the payload states; that of a calibration is of its stored bytes, while the payload
//	               states that of its canonical content
//	samples        block i is sweep i of the payload, see samples.go
//	counters       see count.go
//
// Terms, where the field is not empty (a text is its length as varint and its bytes; an instant is the number of its quarter of an hour since
// 1970, rounded down, as u64 with the highest bit inverted, big-endian):
//
//	id             16 bytes
//	serial, lot, station   the bytes of the name
//	unit           what attempts are counted by: text purpose, text part type, then text "serial", text serial;
//	               or text "pocket", text lot, text carrier, text pocket in decimal
//	quarter        the instant of begin.measured_at
const (
	termID      = "id"
	termSerial  = "serial"
	termLot     = "lot"
	termStation = "station"
	termUnit    = "unit"
	termQuarter = "quarter"

	objectPartType    = "part-type"
	objectCalibration = "calibration"

	bucketRecords = "records" // of a volume, for damage
)

// deterministic gives the same bytes for the same message: objects are shared by their hash.
var deterministic = proto.MarshalOptions{Deterministic: true}

// intake is one inspection on its way into the store: everything that does not depend on its sequence is ready.
type intake struct {
	store    *Store
	id       inspection.ID
	decision parttype.Decision
	message  *pb.Inspection // shares nothing with the caller
	kept     *inspection.Record
	entry    volume.Entry // without payload and deltas
	unit     volume.Term
}

// newIntake prepares an inspection. The record is taken through its stored form and back, so that what cannot be read is never written, and
// the first answer is the same as every later one.
func (s *Store) newIntake(ctx context.Context, r *inspection.Record, sweeps []sweep.Sweep) (*intake, error) {
	if err := r.Begin.Check(); err != nil {
		return nil, err
	}
	if err := checkSweeps(r.Sweeps, sweeps); err != nil {
		return nil, err
	}
	in := &intake{store: s, id: r.Begin.ID}
	stored, err := deterministic.Marshal(wire.RecordToProto(r))
	if err != nil {
		return nil, inspection.Faultf(inspection.Malformed, "inspection", "cannot be stored: %w", err)
	}
	in.message = &pb.Inspection{}
	if err := proto.Unmarshal(stored, in.message); err != nil {
		return nil, inspection.Faultf(inspection.Malformed, "inspection", "cannot be stored: %w", err)
	}
	if in.kept, err = wire.RecordFromProto(in.message); err != nil {
		return nil, err
	}
	in.entry = volume.Entry{TestedAt: in.kept.Begin.MeasuredAt, Terms: termsOf(in.kept)}
	in.unit = unitTerm(in.kept)
	if in.entry.Samples, err = s.encodeSweeps(r.Sweeps, sweeps); err != nil {
		return nil, err
	}
	return in, in.evidence(ctx)
}

// evidence adds the part type and the calibration that the record was judged under.
func (in *intake) evidence(ctx context.Context) error {
	applied := in.kept.PartType
	p, err := in.store.PartType(ctx, applied.Name, applied.Version)
	if err != nil {
		return err
	}
	if p.Hash() != applied.Hash {
		return inspection.Faultf(inspection.Unknown, "part_type", "version %d of %s is published with SHA-256 %x, the record states %x",
			applied.Version, applied.Name, p.Hash(), applied.Hash)
	}
	in.decision = p.Decision
	in.entry.Objects = append(in.entry.Objects, volume.Object{Kind: objectPartType, Hash: applied.Hash, Bytes: p.Source})
	id := in.kept.Begin.Calibration
	if id == "" {
		return nil
	}
	c, err := in.store.keptCalibration(id)
	if err != nil {
		return err
	}
	if c.hash != in.kept.CalibrationHash {
		return inspection.Faultf(inspection.Unknown, "calibration", "%s is published with hash %x, the record states %x", id, c.hash, in.kept.CalibrationHash)
	}
	in.entry.Objects = append(in.entry.Objects, c.object)
	return nil
}

// size is the memory that waits with the intake; objects are shared.
func (in *intake) size() int64 { return in.entry.Size() + int64(2*proto.Size(in.message)) }

// complete is the writer's Prepare: attempt, sequence, time, counters. It may run more than once, and only the last run counts.
func (in *intake) complete(sequence uint64, look Lookup) (volume.Entry, error) {
	before := in.store.history(look, in.unit)
	in.message.Sequence = sequence
	in.message.RecordedAt = timestamppb.New(in.store.clock.Now())
	in.message.Attempt = uint32(before.attempts + 1)
	in.kept.Sequence, in.kept.RecordedAt, in.kept.Attempt = sequence, in.message.RecordedAt.AsTime(), before.attempts+1
	e := in.entry
	var err error
	if e.Payload, err = deterministic.Marshal(in.message); err != nil {
		return volume.Entry{}, err
	}
	e.Deltas = deltasOf(in.kept, in.decision, before.disposition)
	return e, nil
}

// past is what counts of a unit's earlier inspections.
type past struct {
	attempts    int         // used up
	disposition *counterKey // in force; nil: none
}

// history asks for the newest inspection of the unit. That one carries the attempts and the disposition before it, so no other is read. Where a
// volume cannot be read, what the others say counts: a unit may then get an attempt more, but recording goes on.
func (s *Store) history(look Lookup, unit volume.Term) past {
	found, err := look.Newest(unit, 1)
	if err != nil {
		s.warnUnsure(err)
	}
	if len(found) == 0 {
		return past{}
	}
	r, err := decodeRecord(0, found[0])
	if err != nil {
		s.warnUnsure(err)
		return past{}
	}
	p := past{attempts: r.Attempt, disposition: dispositionIn(found[0].Deltas)}
	if !usesAttempt(&r.Judgement) {
		p.attempts--
	}
	return p
}

// warnUnsure says it once: with a damaged volume it would be said for every unit.
func (s *Store) warnUnsure(err error) {
	s.mu.Lock()
	said := s.unsureOnce
	s.unsureOnce = true
	s.mu.Unlock()
	if !said {
		s.logger.Warn("attempts_uncertain", slog.String("error", err.Error()))
	}
}

// usesAttempt reports whether the judgement uses up one of the unit's attempts: every one does, save a retest of which the station alone is
// the cause.
func usesAttempt(j *verdict.Judgement) bool {
	if j.Verdict != verdict.Retest || len(j.RetestCauses) == 0 {
		return true
	}
	return slices.ContainsFunc(j.RetestCauses, func(c verdict.RetestCause) bool { return !c.Station })
}

// termsOf returns what the record is found by, but for its id, which the writer adds.
func termsOf(r *inspection.Record) []volume.Term {
	terms := []volume.Term{unitTerm(r), {Name: []byte(termQuarter), Value: appendQuarter(nil, quarterOf(r.Begin.MeasuredAt))}}
	for _, t := range []struct{ name, value string }{
		{termSerial, string(r.Begin.Unit.Serial)}, {termLot, string(r.Begin.Unit.Lot)}, {termStation, string(r.Begin.Station)},
	} {
		if t.value != "" {
			terms = append(terms, textTerm(t.name, t.value))
		}
	}
	return terms
}

func textTerm(name, value string) volume.Term {
	return volume.Term{Name: []byte(name), Value: []byte(value)}
}

// unitTerm is one unit held against one part type, whatever its version, for one purpose: a look for engineering takes no attempt away from
// production.
func unitTerm(r *inspection.Record) volume.Term {
	u := r.Begin.Unit
	value := appendTexts(nil, string(r.Begin.Purpose), r.PartType.Name)
	if u.Serial != "" {
		value = appendTexts(value, "serial", string(u.Serial))
	} else {
		value = appendTexts(value, "pocket", string(u.Lot), u.Carrier, strconv.Itoa(u.Pocket))
	}
	return volume.Term{Name: []byte(termUnit), Value: value}
}

// appendTexts appends each text as its length, a varint, and its bytes.
func appendTexts(dst []byte, texts ...string) []byte {
	for _, t := range texts {
		dst = append(binary.AppendUvarint(dst, uint64(len(t))), t...)
	}
	return dst
}

// cutText takes one text off the front.
func cutText(b []byte) (text string, rest []byte, ok bool) {
	n, width := binary.Uvarint(b)
	if width <= 0 || n > uint64(len(b)-width) {
		return "", nil, false
	}
	b = b[width:]
	return string(b[:n]), b[n:], true
}

// quarter is how finely times are indexed and counts are kept.
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

// appendQuarter writes a quarter so that the order of the bytes is the order of time.
func appendQuarter(dst []byte, q int64) []byte {
	return binary.BigEndian.AppendUint64(dst, uint64(q)^1<<63)
}

func readQuarter(b []byte) int64 { return int64(binary.BigEndian.Uint64(b) ^ 1<<63) }

// decodeRecord turns a stored record into the domain's. What cannot be a record of ours is damage, named by volume and sequence.
func decodeRecord(number uint64, stored volume.Record) (*inspection.Record, error) {
	m := &pb.Inspection{}
	err := proto.Unmarshal(stored.Payload, m)
	var r *inspection.Record
	if err == nil {
		r, err = wire.RecordFromProto(m)
	}
	if err == nil && (r.Sequence != stored.Sequence || r.ContentHash != stored.ContentHash || !r.Begin.MeasuredAt.Equal(stored.TestedAt)) {
		err = fmt.Errorf("the payload is that of sequence %d, content %x, measured %v", r.Sequence, r.ContentHash, r.Begin.MeasuredAt)
	}
	if err != nil {
		return nil, brokenRecord(number, stored.Sequence, "not an inspection", err)
	}
	return r, nil
}

// brokenRecord names a record that was found broken. The fault's kind is ours: a cause of kind Malformed would blame the caller.
func brokenRecord(number, sequence uint64, problem string, cause error) error {
	return &inspection.Fault{Kind: inspection.Broken, Field: "inspection", Err: &damage.Error{
		Volume: number, Bucket: bucketRecords, Key: binary.BigEndian.AppendUint64(nil, sequence), Problem: problem, Cause: cause,
	}}
}
