package storagetest

import (
	"fmt"
	"time"

	"example.com/admit/service/inspection"
)

// partTypes: a version once published never changes; the same file again is harmless; whoever asks gets the very same value.
func partTypes(s *scene) {
	ctx := s.Context()
	second := PartType(s, partTypeName, 2, "second")
	kept, already, err := s.PublishPartType(ctx, second, "Engineer A")
	if err != nil || already || kept.By != "Engineer A" || kept.At.IsZero() || kept.At.Location() != time.UTC {
		s.Fatalf("publishing: kept at %v by %q, already %v, error %v", kept.At, kept.By, already, err)
	}
	again, already, err := s.PublishPartType(ctx, PartType(s, partTypeName, 2, "second"), "Engineer B")
	if err != nil || !already || again.By != "Engineer A" || !again.At.Equal(kept.At) || again.PartType != kept.PartType {
		s.Errorf("publishing the same again: kept at %v by %q, already %v, error %v; first at %v", again.At, again.By, already, err, kept.At)
	}
	_, _, err = s.PublishPartType(ctx, PartType(s, partTypeName, 2, "other file"), "Engineer B")
	s.refused("another file under one version", err, inspection.Conflict, partTypeName, fmt.Sprintf("%x", second.Hash()))
	// A version may be skipped and come later: the newest is the one with the highest number.
	for _, version := range []int{11, 10} {
		if _, _, err := s.PublishPartType(ctx, PartType(s, partTypeName, version, "later"), "Engineer A"); err != nil {
			s.Fatal(err)
		}
	}
	newest, err := s.PartType(ctx, partTypeName, 0)
	if err != nil || newest.Version != 11 {
		s.Errorf("the newest is %+v, error %v", newest, err)
	}
	for _, version := range []int{0, 11} {
		p, err := s.PartType(ctx, partTypeName, version)
		found, ok, err2 := s.FindPartType(ctx, partTypeName, version)
		if err != nil || err2 != nil || !ok || p != newest || found.PartType != newest {
			s.Errorf("version %d is not the very value that the newest was", version)
		}
	}
	p, err := s.PartType(ctx, partTypeName, 2)
	if err != nil {
		s.Fatal(err)
	}
	s.same("version 2", second, p)
	_, err = s.PartType(ctx, partTypeName, 3)
	s.refused("a version that is not there", err, inspection.Unknown, partTypeName, "3")
	_, err = s.PartType(ctx, "TM-50M000-T3", 0)
	s.refused("a name that is not there", err, inspection.Unknown, "TM-50M000-T3")
	if _, ok, err := s.FindPartType(ctx, "TM-50M000-T3", 1); ok || err != nil {
		s.Errorf("finding a name that is not there: %v, error %v", ok, err)
	}
	listed := func(name string) (list []string) {
		all, err := s.PartTypes(ctx, name)
		if err != nil {
			s.Fatal(err)
		}
		for _, p := range all {
			list = append(list, fmt.Sprintf("%s %d", p.PartType.Name, p.PartType.Version))
		}
		return list
	}
	s.same("the newest of all names", []string{otherTypeName + " 1", partTypeName + " 11"}, listed(""))
	s.same("all of one name", []string{partTypeName + " 11", partTypeName + " 10", partTypeName + " 2", partTypeName + " 1"}, listed(partTypeName))
	s.same("all of no name", []string(nil), listed("TM-50M000-T3"))
	if r, ok := s.Backend.(restarter); ok {
		s.Backend = r.Restart(s.T)
		found, ok, err := s.FindPartType(ctx, partTypeName, 2)
		if err != nil || !ok {
			s.Fatalf("after a restart: %v, error %v", ok, err)
		}
		s.same("version 2 after a restart", kept, found)
	}
}

// calibrations: as part types, and bit for bit.
func calibrations(s *scene) {
	ctx := s.Context()
	c := Calibration("N2-A-2026-11-30", "N2-A")
	hash := inspection.CalibrationHash(c)
	if already, err := s.PublishCalibration(ctx, c, "N2"); err != nil || already {
		s.Fatalf("publishing: already %v, error %v", already, err)
	}
	if already, err := s.PublishCalibration(ctx, Calibration("N2-A-2026-11-30", "N2-A"), "N2"); err != nil || !already {
		s.Errorf("publishing the same again: already %v, error %v", already, err)
	}
	other := Calibration("N2-A-2026-11-30", "N2-A")
	other.Standards[2].Re[3] += 1e-15
	_, err := s.PublishCalibration(ctx, other, "N2")
	s.refused("other content under one id", err, inspection.Conflict, "N2-A-2026-11-30")
	// The caller's buffers are its own.
	c.Standards[1].Im[2] = 17
	kept, keptHash, err := s.Calibration(ctx, "N2-A-2026-11-30")
	if err != nil {
		s.Fatal(err)
	}
	if keptHash != hash || inspection.CalibrationHash(kept) != hash {
		s.Errorf("hash %x stated, %x by content, want %x", keptHash, inspection.CalibrationHash(kept), hash)
	}
	s.same("the calibration", Calibration("N2-A-2026-11-30", "N2-A"), kept)
	if again, _, err := s.Calibration(ctx, "N2-A-2026-11-30"); err != nil || again != kept {
		s.Errorf("another value came back the second time, error %v", err)
	}
	_, _, err = s.Calibration(ctx, "N2-A-2026-12-01")
	s.refused("an id that is not there", err, inspection.Unknown, "N2-A-2026-12-01")
	nominal := Calibration("N3-A nominal", "N3-A")
	nominal.Standards, nominal.ReceiverNoise, nominal.TemperatureC = nil, nil, nil
	if _, err := s.PublishCalibration(ctx, nominal, "N3"); err != nil {
		s.Fatal(err)
	}
	if kept, _, err = s.Calibration(ctx, "N3-A nominal"); err != nil {
		s.Fatal(err)
	}
	s.same("a calibration without standards", nominal, kept)
}
