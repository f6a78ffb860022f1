package tree

import (
	"encoding/binary"
	"fmt"
	"hash/fnv"
	"io"

	"example.com/admit/storage/volume/damage"
)

// PageSize is the page size of every file of the store, whatever the machine's own is, so that files can be moved between machines.
const PageSize = 4096

const (
	headerSize  = 16
	metaSize    = 64
	metaMagic   = 0xED0CDAED
	metaVersion = 2
	noFreelist  = ^uint64(0)
	// A file is never shorter than two metas, a free list and a root.
	leastPages = 4
)

// Meta is the state of a file as one of its two meta pages gives it.
type Meta struct {
	Root        uint64 // page of the root bucket
	Freelist    uint64 // page of the free list
	HighWater   uint64 // first page beyond those in use
	Transaction uint64
	Slot        int // which of the two meta pages this is
	// Single says that the other meta page is unreadable. That is what an interrupted commit leaves behind, and also what damage to the
	// newest commit looks like: only something outside the file can tell the two apart.
	Single bool
}

// Bytes returns the length of the part of the file that is in use.
func (m Meta) Bytes() int64 { return int64(m.HighWater) * PageSize }

// ReadMeta reads both meta pages of a file of size bytes and returns the newer readable one. An empty or short file, two unreadable meta
// pages, and a file shorter than its own high-water mark are damage.
func ReadMeta(r io.ReaderAt, size int64) (Meta, error) {
	if size == 0 {
		return Meta{}, &damage.Error{Problem: "the file is empty"}
	}
	if size < leastPages*PageSize {
		return Meta{}, &damage.Error{Problem: fmt.Sprintf("the file has %d bytes, fewer than the %d of an empty one", size, leastPages*PageSize)}
	}
	var metas [2]Meta
	var faults [2]error
	for slot := range metas {
		metas[slot], faults[slot] = readSlot(r, slot)
	}
	var newest Meta
	switch {
	case faults[0] != nil && faults[1] != nil:
		return Meta{}, &damage.Error{Problem: "both meta pages are unreadable", Cause: fmt.Errorf("%w; %w", faults[0], faults[1])}
	case faults[0] != nil:
		newest, newest.Single = metas[1], true
	case faults[1] != nil:
		newest, newest.Single = metas[0], true
	case metas[1].Transaction > metas[0].Transaction:
		newest = metas[1]
	default:
		newest = metas[0]
	}
	newest.Single = faults[0] != nil || faults[1] != nil
	return newest, newest.check(size)
}

func (m Meta) check(size int64) error {
	slot := uint64(m.Slot)
	switch {
	case m.HighWater < leastPages || m.HighWater > uint64(size)/PageSize:
		return damage.OnPage(slot, "the file has %d bytes, its newest commit needs %d pages of %d", size, m.HighWater, PageSize)
	case m.Root < 2 || m.Root >= m.HighWater:
		return damage.OnPage(slot, "root page %d is outside 2..%d", m.Root, m.HighWater-1)
	case m.Freelist < 2 || m.Freelist >= m.HighWater:
		return damage.OnPage(slot, "free list page %d is outside 2..%d", m.Freelist, m.HighWater-1)
	}
	return nil
}

func readSlot(r io.ReaderAt, slot int) (Meta, error) {
	var page [headerSize + metaSize]byte
	if _, err := r.ReadAt(page[:], int64(slot)*PageSize); err != nil {
		return Meta{}, fmt.Errorf("meta page %d: %w", slot, err)
	}
	b := page[headerSize:]
	order := binary.LittleEndian
	if magic := order.Uint32(b); magic != metaMagic {
		return Meta{}, damage.OnPage(uint64(slot), "magic is %08x, not %08x", magic, metaMagic)
	}
	if version := order.Uint32(b[4:]); version != metaVersion {
		return Meta{}, damage.OnPage(uint64(slot), "file format version %d, not %d", version, metaVersion)
	}
	hash := fnv.New64a()
	hash.Write(b[:56])
	if sum, stored := hash.Sum64(), order.Uint64(b[56:]); sum != stored {
		return Meta{}, damage.OnPage(uint64(slot), "meta checksum is %016x, stored as %016x", sum, stored)
	}
	if pageSize := order.Uint32(b[8:]); pageSize != PageSize {
		return Meta{}, damage.OnPage(uint64(slot), "page size %d, not %d", pageSize, PageSize)
	}
	return Meta{
		Root:        order.Uint64(b[16:]),
		Freelist:    order.Uint64(b[32:]),
		HighWater:   order.Uint64(b[40:]),
		Transaction: order.Uint64(b[48:]),
		Slot:        slot,
	}, nil
}
