package catalogue

import (
	"bytes"
	"encoding/binary"
	"time"

	"go.etcd.io/bbolt"

	"example.com/admit/storage/volume"
	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/envelope"
)

// PartType names one version of a part type.
type PartType struct {
	Name    string
	Version uint32
}

func (p PartType) key() []byte {
	return binary.BigEndian.AppendUint32(append([]byte(p.Name), 0), p.Version)
}

// PutPartType stores a part type. The same content again changes nothing; other content is ErrDifferentContent.
func (c *Catalogue) PutPartType(p PartType, content []byte) error {
	if err := checkName(p.Name); err != nil {
		return err
	}
	return c.putOnce(bucketPartTypes, p.key(), content)
}

// PartType returns the content of a part type, or ErrNotFound.
func (c *Catalogue) PartType(p PartType) ([]byte, error) { return c.get(bucketPartTypes, p.key()) }

// PartTypes returns all part types, by name and then version.
func (c *Catalogue) PartTypes() ([]PartType, error) {
	var list []PartType
	err := c.each(bucketPartTypes, nil, func(key, _ []byte) (bool, error) {
		name, version, found := bytes.Cut(key, []byte{0})
		if !found || len(version) != 4 {
			return false, &damage.Error{Bucket: bucketPartTypes, Key: key, Problem: "not a name and a version"}
		}
		list = append(list, PartType{string(name), binary.BigEndian.Uint32(version)})
		return true, nil
	})
	return list, err
}

// PutCalibration stores a calibration. The same content again changes nothing; other content is ErrDifferentContent.
func (c *Catalogue) PutCalibration(id string, content []byte) error {
	if err := checkName(id); err != nil {
		return err
	}
	return c.putOnce(bucketCalibrations, []byte(id), content)
}

// Calibration returns the content of a calibration, or ErrNotFound.
func (c *Catalogue) Calibration(id string) ([]byte, error) {
	return c.get(bucketCalibrations, []byte(id))
}

// Calibrations returns up to limit ids behind after ("" for the first), in order.
func (c *Catalogue) Calibrations(after string, limit int) ([]string, error) {
	if limit <= 0 || limit > volume.MaxPage {
		limit = volume.MaxPage
	}
	var ids []string
	err := c.each(bucketCalibrations, []byte(after), func(key, _ []byte) (bool, error) {
		ids = append(ids, string(key))
		return len(ids) < limit, nil
	})
	return ids, err
}

// Station is what the configuration says of one station.
type Station struct {
	Name    string
	Content []byte
}

// SetStations makes the given stations the only ones. Nothing is written when nothing changed, as at most starts of the server.
func (c *Catalogue) SetStations(stations []Station) error {
	wanted := make(map[string][]byte, len(stations))
	for _, s := range stations {
		if err := checkName(s.Name); err != nil {
			return err
		}
		wanted[s.Name] = s.Content
	}
	present, err := c.Stations()
	if err != nil {
		return err
	}
	unchanged := len(present) == len(wanted)
	for _, s := range present {
		content, found := wanted[s.Name]
		unchanged = unchanged && found && bytes.Equal(content, s.Content)
	}
	if unchanged {
		return nil
	}
	return c.update(func(tx *bbolt.Tx, revision uint64) error {
		b := tx.Bucket([]byte(bucketStations))
		for _, s := range present {
			if _, found := wanted[s.Name]; !found {
				if err := b.Delete([]byte(s.Name)); err != nil {
					return err
				}
			}
		}
		for name, content := range wanted {
			if err := b.Put([]byte(name), envelope.Seal(bucketStations, []byte(name), revision, content)); err != nil {
				return err
			}
		}
		return nil
	})
}

// Stations returns all stations by name.
func (c *Catalogue) Stations() ([]Station, error) {
	var list []Station
	err := c.each(bucketStations, nil, func(key, content []byte) (bool, error) {
		list = append(list, Station{string(key), content})
		return true, nil
	})
	return list, err
}

// PutVolume writes a volume's row of the manifest.
func (c *Catalogue) PutVolume(info volume.Info) error {
	key := binary.BigEndian.AppendUint64(nil, info.Number)
	return c.put(bucketManifest, key, encodeInfo(info))
}

// Volumes returns the manifest by number.
func (c *Catalogue) Volumes() ([]volume.Info, error) {
	var list []volume.Info
	err := c.each(bucketManifest, nil, func(key, content []byte) (bool, error) {
		info, ok := decodeInfo(key, content)
		if !ok {
			return false, &damage.Error{Bucket: bucketManifest, Key: key, Problem: "not a volume"}
		}
		list = append(list, info)
		return true, nil
	})
	return list, err
}

const infoSize = 16 + 2 + 9*8

func encodeInfo(info volume.Info) []byte {
	b := make([]byte, 0, infoSize)
	b = append(b, info.ID[:]...)
	kept := byte(0)
	if info.SamplesKept {
		kept = 1
	}
	b = append(b, byte(info.Stage), kept)
	for _, v := range []uint64{
		uint64(nanoseconds(info.CreatedAt)), uint64(info.Age), info.Records, info.FirstSequence, info.LastSequence,
		uint64(nanoseconds(info.FirstTested)), uint64(nanoseconds(info.LastTested)), uint64(info.RecordsBytes), uint64(info.SamplesBytes),
	} {
		b = binary.BigEndian.AppendUint64(b, v)
	}
	return b
}

func decodeInfo(key, b []byte) (volume.Info, bool) {
	if len(key) != 8 || len(b) != infoSize {
		return volume.Info{}, false
	}
	info := volume.Info{Number: binary.BigEndian.Uint64(key)}
	copy(info.ID[:], b)
	info.Stage, info.SamplesKept = volume.Stage(b[16]), b[17] == 1
	v := make([]uint64, 9)
	for i := range v {
		v[i] = binary.BigEndian.Uint64(b[18+8*i:])
	}
	info.CreatedAt, info.Age = at(v[0]), time.Duration(v[1])
	info.Records, info.FirstSequence, info.LastSequence = v[2], v[3], v[4]
	if info.Records > 0 {
		info.FirstTested, info.LastTested = at(v[5]), at(v[6])
	}
	info.RecordsBytes, info.SamplesBytes = int64(v[7]), int64(v[8])
	return info, info.Stage >= volume.Open && info.Stage <= volume.SetAside
}

// nanoseconds of the zero time are not defined; nothing is stored for it.
func nanoseconds(t time.Time) int64 {
	if t.IsZero() {
		return 0
	}
	return t.UnixNano()
}

func at(ns uint64) time.Time { return time.Unix(0, int64(ns)).UTC() }

// SetCursor keeps a value for its owner under a name.
func (c *Catalogue) SetCursor(name string, value []byte) error {
	if err := checkName(name); err != nil {
		return err
	}
	return c.put(bucketCursors, []byte(name), value)
}

// Cursor returns the value kept under a name, or ErrNotFound.
func (c *Catalogue) Cursor(name string) ([]byte, error) { return c.get(bucketCursors, []byte(name)) }
