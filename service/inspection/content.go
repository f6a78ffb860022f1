package inspection

import (
	"crypto/sha256"
	"encoding/binary"
	"hash"
	"math"
	"time"

	"example.com/admit/service/network"
	"example.com/admit/service/sweep"
)

// ContentHash returns the SHA-256 over the canonical content of an inspection: what was measured, of which unit, where, when and under
// which names. It does not depend on how the samples were cut into chunks, nor on when an answer was wished for or what was judged
// elsewhere. Two sendings of one inspection id are the same inspection exactly when their hashes are equal.
//
// The canonical form is a sequence of fields in fixed order: a string as its length (8 bytes, big-endian) and its bytes, an integer as 8
// bytes big-endian, a float as its IEEE 754 bits in 8 bytes big-endian, an array as its length and its elements, an absent value as one
// zero byte and a present one as a one byte before it. A new field may only be added behind a new version word at the front.
func ContentHash(b *Begin, sweeps []sweep.Sweep) [sha256.Size]byte {
	c := canon{h: sha256.New()}
	c.text("admit content 1")
	c.h.Write(b.ID[:])
	c.text(string(b.Purpose))
	c.text(string(b.Unit.Serial))
	c.text(string(b.Unit.Lot))
	c.text(b.Unit.Carrier)
	c.integer(int64(b.Unit.Pocket))
	c.integer(int64(b.Unit.Attempt))
	c.text(string(b.Station))
	c.text(string(b.ContactHead))
	c.text(b.Operator)
	c.text(b.PartType.Name)
	c.integer(int64(b.PartType.Version))
	c.text(string(b.Calibration))
	c.instant(b.MeasuredAt)
	c.present(b.Temperature != nil)
	if t := b.Temperature; t != nil {
		c.float(t.Celsius)
		c.float(t.StandardUncertainty)
	}
	c.present(b.ReferenceLock != nil)
	if l := b.ReferenceLock; l != nil {
		c.present(*l)
	}
	c.integer(int64(len(sweeps)))
	for i := range sweeps {
		c.sweep(&sweeps[i])
	}
	return c.sum()
}

// CalibrationHash returns the SHA-256 over the canonical content of a calibration, in the same form.
func CalibrationHash(c *network.Calibration) [sha256.Size]byte {
	w := canon{h: sha256.New()}
	w.text("admit calibration 1")
	w.text(c.ID)
	w.text(c.ContactHead)
	w.text(string(c.Network))
	w.float(c.ReferenceImpedanceOhm)
	w.float(c.NominalTerminationOhm)
	w.instant(c.TakenAt)
	w.integer(int64(c.ValidFor))
	w.maybe(c.TemperatureC)
	w.present(c.ReceiverNoise != nil)
	if n := c.ReceiverNoise; n != nil {
		w.float(n.RMS)
		w.maybe(n.SourcePowerDBm)
		w.integer(int64(n.Averaging))
	}
	for _, v := range []float64{
		c.SourceLevelOffsetDB, c.SourceLevelUncertaintyDB, c.DriftGainDB, c.DriftPhaseDeg, c.ContactUncertaintyOhm,
		c.ReferenceClockOffsetPPM, c.ReferenceClockUncertaintyPPM,
	} {
		w.float(v)
	}
	w.integer(int64(len(c.Standards)))
	for i := range c.Standards {
		s := &c.Standards[i]
		w.text(string(s.Kind))
		for _, v := range []float64{
			s.ResistanceOhm, s.ResistanceUncertaintyOhm, s.InductanceHenry, s.InductanceUncertaintyHenry,
			s.CapacitanceFarad, s.CapacitanceUncertaintyFarad,
		} {
			w.float(v)
		}
		w.floats(s.FrequencyHz)
		w.floats(s.Re)
		w.floats(s.Im)
	}
	return w.sum()
}

// canon writes canonical fields into a hash, through one small buffer.
type canon struct {
	h   hash.Hash
	buf [4096]byte
}

func (c *canon) integer(v int64) {
	binary.BigEndian.PutUint64(c.buf[:8], uint64(v))
	c.h.Write(c.buf[:8])
}

func (c *canon) float(v float64) { c.integer(int64(math.Float64bits(v))) }

func (c *canon) text(s string) {
	c.integer(int64(len(s)))
	c.h.Write([]byte(s))
}

func (c *canon) present(v bool) {
	b := byte(0)
	if v {
		b = 1
	}
	c.h.Write([]byte{b})
}

func (c *canon) maybe(v *float64) {
	c.present(v != nil)
	if v != nil {
		c.float(*v)
	}
}

func (c *canon) sum() (sum [sha256.Size]byte) {
	c.h.Sum(sum[:0])
	return sum
}

func (c *canon) instant(t time.Time) {
	c.integer(t.Unix())
	c.integer(int64(t.Nanosecond()))
}

func (c *canon) floats(v []float64) {
	c.integer(int64(len(v)))
	for len(v) > 0 {
		n := min(len(v), len(c.buf)/8)
		for i, x := range v[:n] {
			binary.BigEndian.PutUint64(c.buf[8*i:], math.Float64bits(x))
		}
		c.h.Write(c.buf[:8*n])
		v = v[n:]
	}
}

func (c *canon) sweep(s *sweep.Sweep) {
	c.text(string(s.Role))
	c.integer(int64(s.Order))
	c.float(s.FrequencyRatio)
	c.integer(int64(s.DriveStep))
	c.text(string(s.Quantity))
	c.maybe(s.SourcePowerDBm)
	c.integer(int64(s.Timing.Dwell))
	c.integer(int64(s.Timing.Averaging))
	c.integer(int64(s.Timing.LeadIn))
	c.text(string(s.Timing.Phase))
	c.present(s.Grid != nil)
	if g := s.Grid; g != nil {
		c.float(g.StartHz)
		c.float(g.StopHz)
		c.integer(int64(g.Points))
	}
	c.floats(s.FrequencyHz)
	c.floats(s.Re)
	c.floats(s.Im)
}
