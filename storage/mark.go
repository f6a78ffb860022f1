package storage

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"os"

	"example.com/admit/storage/volume/damage"
	"example.com/admit/storage/volume/disk"
	"example.com/admit/storage/volume/envelope"
)

// The high-water mark says, from outside any volume, how far entries were acknowledged. A volume that lost its last commit (bbolt falls
// back by one without a word when its newest meta page is damaged) then stands behind its mark. doc.go draws the file.
const (
	markName    = "mark"
	markMagic   = "admitmrk"
	markSpacing = 4096 // a torn or damaged block hits one slot only
	markSlot    = len(markMagic) + 16 + 3*8 + 4
	markSize    = 2 * markSpacing
)

// position is a place in the store: the last acknowledged entry and the volume that holds it. Zero before the first.
type position struct {
	Volume   uint64
	Sequence uint64
}

// mark is the open mark file. It is used by one goroutine.
type mark struct {
	path    string
	file    disk.File
	storeID [16]byte
	counter uint64
	at      position
	failed  error
}

// createMark makes the mark of a new store. It appears whole or not at all.
func createMark(files disk.FileSystem, path string, storeID [16]byte) error {
	return disk.Replace(files, path, func(w io.Writer) error {
		content := make([]byte, markSize)
		for counter := range uint64(2) {
			copy(content[counter*markSpacing:], encodeMark(storeID, counter, position{}))
		}
		_, err := w.Write(content)
		return err
	})
}

func encodeMark(storeID [16]byte, counter uint64, at position) []byte {
	b := append(make([]byte, 0, markSlot), markMagic...)
	b = append(b, storeID[:]...)
	for _, v := range []uint64{counter, at.Volume, at.Sequence} {
		b = binary.BigEndian.AppendUint64(b, v)
	}
	return binary.BigEndian.AppendUint32(b, envelope.Checksum(b))
}

// openMark reads the mark of a store. One unreadable slot is what a power cut during a write leaves, and is accepted: what was acknowledged
// is in the other. Two are damage, as is the mark of another store.
func openMark(files disk.FileSystem, path string, storeID [16]byte) (*mark, error) {
	file, err := files.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		if errors.Is(err, os.ErrNotExist) {
			err = &damage.Error{File: path, Problem: "the mark is missing", Cause: os.ErrNotExist}
		}
		return nil, err
	}
	m := &mark{path: path, file: file, storeID: storeID}
	if err := m.read(); err != nil {
		return nil, errors.Join(err, file.Close())
	}
	return m, nil
}

func (m *mark) read() error {
	size, err := m.file.Size()
	if err != nil {
		return err
	}
	if size != markSize {
		return damage.InFile(m.path, "the mark has %d bytes, should have %d", size, markSize)
	}
	var faults []error
	for slot := range uint64(2) {
		counter, at, err := m.readSlot(slot)
		if err != nil {
			faults = append(faults, err)
			continue
		}
		if len(faults) == int(slot) || counter > m.counter {
			m.counter, m.at = counter, at
		}
	}
	if len(faults) == 2 {
		return errors.Join(faults...)
	}
	return nil
}

func (m *mark) readSlot(slot uint64) (uint64, position, error) {
	b := make([]byte, markSlot)
	if _, err := m.file.ReadAt(b, int64(slot*markSpacing)); err != nil {
		return 0, position{}, fmt.Errorf("%s: %w", m.path, err)
	}
	body := b[:markSlot-4]
	if string(b[:len(markMagic)]) != markMagic || envelope.Checksum(body) != binary.BigEndian.Uint32(b[markSlot-4:]) {
		return 0, position{}, damage.InFile(m.path, "slot %d is unreadable", slot)
	}
	body = body[len(markMagic):]
	if [16]byte(body[:16]) != m.storeID {
		return 0, position{}, damage.InFile(m.path, "the mark belongs to another store")
	}
	counter := binary.BigEndian.Uint64(body[16:])
	if counter%2 != slot {
		return 0, position{}, damage.InFile(m.path, "slot %d holds number %d", slot, counter)
	}
	return counter, position{binary.BigEndian.Uint64(body[24:]), binary.BigEndian.Uint64(body[32:])}, nil
}

// move writes a new position over the older of the two slots and syncs it. After an error the state of the file is not known: nothing more is
// written until it is opened again.
func (m *mark) move(to position) error {
	if m.failed != nil {
		return m.failed
	}
	counter := m.counter + 1
	_, err := m.file.WriteAt(encodeMark(m.storeID, counter, to), int64(counter%2*markSpacing))
	if err == nil {
		err = m.file.SyncContent()
	}
	if err != nil {
		m.failed = fmt.Errorf("%s: %w", m.path, err)
		return m.failed
	}
	m.counter, m.at = counter, to
	return nil
}

func (m *mark) close() error { return m.file.Close() }
