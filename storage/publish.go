package storage

import (
	"bytes"
	"context"
	"crypto/sha256"
	"errors"
	"fmt"
	"log/slog"
	"maps"
	"math"
	"slices"

	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/wire"
	"example.com/admit/storage/catalogue"
	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
)

// In the catalogue a part type is a message admit.v1.PartType, limits file included; a calibration is a message admit.v1.Calibration with
// the samples of its standards.

type partTypeKey = catalogue.PartType

// listVersions returns the versions of every part type, ascending.
func listVersions(c *catalogue.Catalogue) (map[string][]int, error) {
	list, err := c.PartTypes()
	if err != nil {
		return nil, err
	}
	versions := map[string][]int{}
	for _, p := range list {
		versions[p.Name] = append(versions[p.Name], int(p.Version))
	}
	return versions, nil
}

// PartType returns one version of a part type, 0 the newest. The same pointer comes back every time.
func (s *Store) PartType(ctx context.Context, name string, version int) (*parttype.PartType, error) {
	p, ok, err := s.FindPartType(ctx, name, version)
	switch {
	case err != nil:
		return nil, err
	case !ok && version == 0:
		return nil, inspection.Faultf(inspection.Unknown, "part_type", "no part type %q is published", name)
	case !ok:
		return nil, inspection.Faultf(inspection.Unknown, "part_type", "no version %d of part type %q is published", version, name)
	}
	return p.PartType, nil
}

// FindPartType returns one version of a part type as it was published; the newest is the one with the highest number.
func (s *Store) FindPartType(ctx context.Context, name string, version int) (inspection.Published, bool, error) {
	if err := s.check(ctx); err != nil {
		return inspection.Published{}, false, err
	}
	known := s.versionsOf(name)
	if version == 0 && len(known) > 0 {
		version = known[len(known)-1]
	}
	if !slices.Contains(known, version) {
		return inspection.Published{}, false, nil
	}
	p, err := s.published(partTypeKey{Name: name, Version: uint32(version)})
	return p, err == nil, err
}

func (s *Store) versionsOf(name string) []int {
	s.mu.Lock()
	defer s.mu.Unlock()
	return slices.Clone(s.versions[name])
}

// PartTypes lists the newest version of each name, or every version of one name.
func (s *Store) PartTypes(ctx context.Context, name string) ([]inspection.Published, error) {
	if err := s.check(ctx); err != nil {
		return nil, err
	}
	var keys []partTypeKey
	if name != "" {
		for _, version := range slices.Backward(s.versionsOf(name)) {
			keys = append(keys, partTypeKey{Name: name, Version: uint32(version)})
		}
	} else {
		s.mu.Lock()
		for _, name := range slices.Sorted(maps.Keys(s.versions)) {
			keys = append(keys, partTypeKey{Name: name, Version: uint32(slices.Max(s.versions[name]))})
		}
		s.mu.Unlock()
	}
	var all []inspection.Published
	for _, key := range keys {
		if err := s.check(ctx); err != nil {
			return nil, err
		}
		p, err := s.published(key)
		if err != nil {
			return nil, err
		}
		all = append(all, p)
	}
	return all, nil
}

// published reads a part type that is known to be there.
func (s *Store) published(key partTypeKey) (inspection.Published, error) {
	return s.partTypes.get(key, func() (inspection.Published, int64, error) {
		content, err := s.writer.Catalogue().PartType(key)
		if err != nil {
			return inspection.Published{}, 0, err
		}
		p, err := decodePartType(key, content)
		return p, int64(len(content)), err
	})
}

func decodePartType(key partTypeKey, content []byte) (inspection.Published, error) {
	name := fmt.Sprintf("%s version %d", key.Name, key.Version)
	broken := func(format string, args ...any) error {
		return &inspection.Fault{Kind: inspection.Broken, Field: "part_type", Err: &damage.Error{
			File: catalogue.FileName, Bucket: "part-types", Key: []byte(key.Name), Problem: name + ": " + fmt.Sprintf(format, args...),
		}}
	}
	m := &pb.PartType{}
	if err := proto.Unmarshal(content, m); err != nil {
		return inspection.Published{}, broken("not a part type: %v", err)
	}
	if sum := sha256.Sum256(m.GetLimitsFile()); !bytes.Equal(sum[:], m.GetSha256()) {
		return inspection.Published{}, broken("the limits file has SHA-256 %x, published was %x", sum, m.GetSha256())
	}
	p, err := parttype.Parse(name, m.GetLimitsFile())
	if err != nil {
		// The file is as it was published: it is this program that cannot read it.
		return inspection.Published{}, &inspection.Fault{Kind: inspection.Broken, Field: "part_type", Err: fmt.Errorf("%s can no longer be read: %w", name, err)}
	}
	if p.Name != key.Name || p.Version != int(key.Version) {
		return inspection.Published{}, broken("the limits file is that of %s version %d", p.Name, p.Version)
	}
	return inspection.Published{PartType: p, At: m.GetPublishedAt().AsTime(), By: m.GetPublishedBy()}, nil
}

// PublishPartType keeps a part type version; when the call returns it is on disk.
func (s *Store) PublishPartType(ctx context.Context, p *parttype.PartType, by string) (inspection.Published, bool, error) {
	if p.Version < 1 || p.Version > math.MaxInt32 {
		return inspection.Published{}, false, inspection.Faultf(inspection.Malformed, "part_type", "want a version from 1, got %d", p.Version)
	}
	s.publishing.Lock()
	defer s.publishing.Unlock()
	kept, ok, err := s.FindPartType(ctx, p.Name, p.Version)
	switch {
	case err != nil:
		return inspection.Published{}, false, err
	case ok && !bytes.Equal(kept.PartType.Source, p.Source):
		return inspection.Published{}, false, inspection.Faultf(inspection.Conflict, "part_type",
			"version %d of %s is published with another limits file (SHA-256 %x, now %x)", p.Version, p.Name, kept.PartType.Hash(), p.Hash())
	case ok:
		return kept, true, nil
	}
	key, sum := partTypeKey{Name: p.Name, Version: uint32(p.Version)}, p.Hash()
	content, err := deterministic.Marshal(&pb.PartType{
		Name: p.Name, Version: key.Version, LimitsFile: p.Source, Sha256: sum[:], PublishedAt: timestamppb.New(s.clock.Now()), PublishedBy: by,
	})
	if err != nil {
		return inspection.Published{}, false, inspection.Faultf(inspection.Malformed, "part_type", "cannot be stored: %w", err)
	}
	// What could not be read back is not written.
	if _, err := decodePartType(key, content); err != nil {
		return inspection.Published{}, false, inspection.Faultf(inspection.Malformed, "part_type", "%w", errors.Unwrap(err))
	}
	if err := s.writer.Catalogue().PutPartType(key, content); err != nil {
		return inspection.Published{}, false, s.catalogueFault("part_type", err)
	}
	s.mu.Lock()
	at, _ := slices.BinarySearch(s.versions[p.Name], p.Version)
	s.versions[p.Name] = slices.Insert(s.versions[p.Name], at, p.Version)
	s.mu.Unlock()
	kept, err = s.published(key)
	return kept, false, err
}

// catalogueFault turns an error of writing the catalogue into a fault.
func (s *Store) catalogueFault(field string, err error) error {
	switch {
	case errors.Is(err, catalogue.ErrName):
		return inspection.Faultf(inspection.Malformed, field, "%w", err)
	case errors.Is(err, ErrFull):
		return s.faultOf(err)
	}
	s.logger.Error("catalogue_failed", slog.String("error", err.Error()))
	return inspection.Faultf(inspection.Unavailable, field, "%w", err)
}

// Calibration returns a calibration and the hash of its content. The same pointer comes back every time.
func (s *Store) Calibration(ctx context.Context, id inspection.CalibrationID) (*network.Calibration, [32]byte, error) {
	if err := s.check(ctx); err != nil {
		return nil, [32]byte{}, err
	}
	c, err := s.keptCalibration(id)
	return c.calibration, c.hash, err
}

// keptCalibration reads a calibration; one that is not there is a Fault of kind Unknown.
func (s *Store) keptCalibration(id inspection.CalibrationID) (keptCalibration, error) {
	return s.calibrations.get(id, func() (keptCalibration, int64, error) {
		if id == "" {
			return keptCalibration{}, 0, inspection.Faultf(inspection.Unknown, "calibration", "a calibration without a name is never published")
		}
		content, err := s.writer.Catalogue().Calibration(string(id))
		if errors.Is(err, catalogue.ErrNotFound) {
			return keptCalibration{}, 0, inspection.Faultf(inspection.Unknown, "calibration", "no calibration %q is published", id)
		}
		if err != nil {
			return keptCalibration{}, 0, err
		}
		c, err := decodeCalibration(id, content)
		// Stored form and numbers are of one size.
		return c, int64(2 * len(content)), err
	})
}

func decodeCalibration(id inspection.CalibrationID, content []byte) (keptCalibration, error) {
	m := &pb.Calibration{}
	err := proto.Unmarshal(content, m)
	var c *network.Calibration
	if err == nil {
		c, err = wire.CalibrationFromProto(m)
	}
	if err == nil && c.ID != string(id) {
		err = fmt.Errorf("it is calibration %q", c.ID)
	}
	if err != nil {
		return keptCalibration{}, &inspection.Fault{Kind: inspection.Broken, Field: "calibration", Err: &damage.Error{
			File: catalogue.FileName, Bucket: "calibrations", Key: []byte(id), Problem: fmt.Sprintf("calibration %s", id), Cause: err,
		}}
	}
	object := volume.Object{Kind: objectCalibration, Hash: sha256.Sum256(content), Bytes: content}
	return keptCalibration{calibration: c, hash: inspection.CalibrationHash(c), object: object}, nil
}

// PublishCalibration keeps a calibration; when the call returns it is on disk.
func (s *Store) PublishCalibration(ctx context.Context, c *network.Calibration, by string) (bool, error) {
	if err := s.check(ctx); err != nil {
		return false, err
	}
	s.publishing.Lock()
	defer s.publishing.Unlock()
	id, hash := inspection.CalibrationID(c.ID), inspection.CalibrationHash(c)
	kept, err := s.keptCalibration(id)
	switch {
	case err == nil && kept.hash != hash:
		return false, inspection.Faultf(inspection.Conflict, "calibration", "%s is published with other content (hash %x, now %x)", id, kept.hash, hash)
	case err == nil:
		return true, nil
	case inspection.KindOf(err) != inspection.Unknown:
		return false, err
	}
	content, err := deterministic.Marshal(wire.CalibrationToProto(c, true))
	if err != nil {
		return false, inspection.Faultf(inspection.Malformed, "calibration", "cannot be stored: %w", err)
	}
	// What could not be read back as it is is not written.
	back, err := decodeCalibration(id, content)
	if err == nil && back.hash != hash {
		err = fmt.Errorf("it would change by being stored (hash %x, then %x)", hash, back.hash)
	}
	if err != nil {
		return false, inspection.Faultf(inspection.Malformed, "calibration", "cannot be stored: %w", err)
	}
	if err := s.writer.Catalogue().PutCalibration(c.ID, content); err != nil {
		return false, s.catalogueFault("calibration", err)
	}
	s.logger.Info("calibration_kept", slog.String("calibration", c.ID), slog.String("by", by))
	return false, nil
}
