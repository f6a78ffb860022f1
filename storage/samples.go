package storage

import (
	"encoding/binary"
	"errors"
	"math"

	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
	"example.com/admit/storage/volume"
)

// The block of one sweep is three arrays one behind the other, each as a varint length in bytes and an array as package volume encodes
// it. Length 0 says that the array is absent.
//
//	frequencies in hertz   absent where they are, bit for bit, the points of the grid in the sweep's header
//	real parts             or magnitudes
//	imaginary parts        absent where the sweep has magnitudes only

var errBlock = errors.New("not the block of a sweep")

// checkSweeps holds the sweeps against the headers in the record.
func checkSweeps(headers []inspection.SweepHeader, sweeps []sweep.Sweep) error {
	if len(headers) != len(sweeps) {
		return inspection.Faultf(inspection.Malformed, "sweeps", "want the %d sweeps of the record, got %d", len(headers), len(sweeps))
	}
	for i := range sweeps {
		w, n := &sweeps[i], headers[i].Points
		if len(w.FrequencyHz) != n || len(w.Re) != n || len(w.Im) != n && len(w.Im) != 0 {
			return inspection.Faultf(inspection.Malformed, "sweeps", "want %d points in sweep %d, got %d frequencies, %d real and %d imaginary parts",
				n, i, len(w.FrequencyHz), len(w.Re), len(w.Im))
		}
	}
	return nil
}

// encodeSweeps returns one block for each sweep.
func (s *Store) encodeSweeps(headers []inspection.SweepHeader, sweeps []sweep.Sweep) ([]volume.SampleBlock, error) {
	e, ok := s.encoders.Get().(*volume.Encoder)
	if !ok {
		var err error
		if e, err = volume.NewEncoder(); err != nil {
			return nil, err
		}
	}
	defer s.encoders.Put(e)
	blocks := make([]volume.SampleBlock, 0, len(sweeps))
	for i := range sweeps {
		blocks = append(blocks, volume.SampleBlock{Index: uint32(i), Bytes: encodeSweep(e, headers[i].Grid, &sweeps[i])})
	}
	return blocks, nil
}

func encodeSweep(e *volume.Encoder, g *sweep.Grid, w *sweep.Sweep) []byte {
	var block, array []byte
	for i, values := range [][]float64{w.FrequencyHz, w.Re, w.Im} {
		array = array[:0]
		if !(i == 0 && onGrid(g, values)) && len(values) > 0 {
			array = e.Encode(array, values)
		}
		block = append(binary.AppendUvarint(block, uint64(len(array))), array...)
	}
	return block
}

// onGrid reports whether the frequencies are the points of the grid, bit for bit: then the header says it all.
func onGrid(g *sweep.Grid, frequencyHz []float64) bool {
	if g == nil || g.Points != len(frequencyHz) {
		return false
	}
	for i, f := range frequencyHz {
		if math.Float64bits(f) != math.Float64bits(g.At(i)) {
			return false
		}
	}
	return true
}

// decodeSweeps is the inverse of encodeSweeps.
func (s *Store) decodeSweeps(headers []inspection.SweepHeader, blocks []volume.SampleBlock) ([]sweep.Sweep, error) {
	if len(blocks) != len(headers) {
		return nil, errBlock
	}
	d, ok := s.decoders.Get().(*volume.Decoder)
	if !ok {
		var err error
		if d, err = volume.NewDecoder(); err != nil {
			return nil, err
		}
	}
	defer s.decoders.Put(d)
	sweeps := make([]sweep.Sweep, len(headers))
	for i, b := range blocks {
		if b.Index != uint32(i) {
			return nil, errBlock
		}
		sweeps[i] = headers[i].Sweep
		if err := decodeSweep(d, &sweeps[i], headers[i].Points, b.Bytes); err != nil {
			return nil, err
		}
	}
	return sweeps, nil
}

func decodeSweep(d *volume.Decoder, w *sweep.Sweep, points int, block []byte) error {
	for i, into := range []*[]float64{&w.FrequencyHz, &w.Re, &w.Im} {
		n, width := binary.Uvarint(block)
		if width <= 0 || n > uint64(len(block)-width) {
			return errBlock
		}
		array := block[width:][:n]
		block = block[width:][n:]
		*into = nil
		switch {
		case n > 0:
			values, err := d.Decode(make([]float64, 0, points), array, points)
			if err != nil {
				return err
			}
			if len(values) != points {
				return errBlock
			}
			*into = values
		case i == 0 && w.Grid != nil && w.Grid.Points == points:
			*into = make([]float64, points)
			for k := range points {
				w.FrequencyHz[k] = w.Grid.At(k)
			}
		case i < 2 && points > 0:
			return errBlock
		}
	}
	if len(block) > 0 {
		return errBlock
	}
	return nil
}
