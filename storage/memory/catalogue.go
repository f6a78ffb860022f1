package memory

import (
	"bytes"
	"cmp"
	"context"
	"slices"

	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
)

// PartType returns one version of a part type, 0 the newest.
func (s *Store) PartType(ctx context.Context, name string, version int) (*parttype.PartType, error) {
	p, ok, err := s.FindPartType(ctx, name, version)
	if err != nil {
		return nil, err
	}
	if !ok {
		if version == 0 {
			return nil, inspection.Faultf(inspection.Unknown, "part_type", "no part type %q is published", name)
		}
		return nil, inspection.Faultf(inspection.Unknown, "part_type", "no version %d of part type %q is published", version, name)
	}
	return p.PartType, nil
}

// FindPartType returns one version of a part type as it was published; the newest is the one with the highest number.
func (s *Store) FindPartType(ctx context.Context, name string, version int) (inspection.Published, bool, error) {
	if err := ctx.Err(); err != nil {
		return inspection.Published{}, false, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if version == 0 {
		for ref := range s.partTypes {
			if ref.Name == name {
				version = max(version, ref.Version)
			}
		}
	}
	p, ok := s.partTypes[inspection.PartTypeRef{Name: name, Version: version}]
	return p, ok, nil
}

// PartTypes lists the newest version of each name, or every version of one name.
func (s *Store) PartTypes(ctx context.Context, name string) ([]inspection.Published, error) {
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	var all []inspection.Published
	for ref, p := range s.partTypes {
		if name == "" || ref.Name == name {
			all = append(all, p)
		}
	}
	slices.SortFunc(all, func(a, b inspection.Published) int {
		return cmp.Or(cmp.Compare(a.PartType.Name, b.PartType.Name), cmp.Compare(b.PartType.Version, a.PartType.Version))
	})
	if name == "" {
		all = slices.CompactFunc(all, func(a, b inspection.Published) bool { return a.PartType.Name == b.PartType.Name })
	}
	return all, nil
}

// PublishPartType keeps a part type version.
func (s *Store) PublishPartType(ctx context.Context, p *parttype.PartType, by string) (inspection.Published, bool, error) {
	if err := ctx.Err(); err != nil {
		return inspection.Published{}, false, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	ref := inspection.PartTypeRef{Name: p.Name, Version: p.Version}
	if kept, ok := s.partTypes[ref]; ok {
		if !bytes.Equal(kept.PartType.Source, p.Source) {
			return inspection.Published{}, false, inspection.Faultf(inspection.Conflict, "part_type",
				"version %d of %s is published with another limits file (SHA-256 %x, now %x)", p.Version, p.Name, kept.PartType.Hash(), p.Hash())
		}
		return kept, true, nil
	}
	if s.fault != nil {
		return inspection.Published{}, false, s.fault
	}
	kept := inspection.Published{PartType: p, At: s.clock.Now().UTC(), By: by}
	s.partTypes[ref] = kept
	return kept, false, nil
}

// Calibration returns a calibration with the hash of its content.
func (s *Store) Calibration(ctx context.Context, id inspection.CalibrationID) (*network.Calibration, [32]byte, error) {
	if err := ctx.Err(); err != nil {
		return nil, [32]byte{}, err
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	c, ok := s.calibrations[id]
	if !ok {
		return nil, [32]byte{}, inspection.Faultf(inspection.Unknown, "calibration", "no calibration %q is published", id)
	}
	return c.kept, c.hash, nil
}

// PublishCalibration keeps a copy of the calibration.
func (s *Store) PublishCalibration(ctx context.Context, c *network.Calibration, _ string) (bool, error) {
	if err := ctx.Err(); err != nil {
		return false, err
	}
	hash := inspection.CalibrationHash(c)
	s.mu.Lock()
	defer s.mu.Unlock()
	if first, ok := s.calibrations[inspection.CalibrationID(c.ID)]; ok {
		if first.hash != hash {
			return false, inspection.Faultf(inspection.Conflict, "calibration", "%s is published with other content (hash %x, now %x)", c.ID, first.hash, hash)
		}
		return true, nil
	}
	if s.fault != nil {
		return false, s.fault
	}
	kept := *c
	kept.Standards = slices.Clone(c.Standards)
	for i := range kept.Standards {
		std := &kept.Standards[i]
		std.FrequencyHz, std.Re, std.Im = slices.Clone(std.FrequencyHz), slices.Clone(std.Re), slices.Clone(std.Im)
	}
	s.calibrations[inspection.CalibrationID(c.ID)] = calibration{&kept, hash}
	return false, nil
}
