// Package floor knows the test floor as it stands: the latest state of every station, from what is recorded and which streams are open. It
// keeps no history.
package floor

import (
	"cmp"
	"context"
	"fmt"
	"slices"
	"sync"
	"time"

	"example.com/admit/service/inspection"
)

// MaxUnlisted bounds how many stations the board remembers where the configuration lists none: a name is then whatever a caller says.
const MaxUnlisted = 1000

// seedFrom is how many of the newest records are looked through for stations where the configuration lists none.
const seedFrom = 1000

// State is one station and what it was last seen doing.
type State struct {
	inspection.Station
	ContactHead inspection.ContactHead   // of the last inspection; "": none yet
	Calibration inspection.CalibrationID // of the last inspection; "": none yet, or the nominal network
	Last        *inspection.Record       // the last recorded inspection, nil: none yet; shared, not to be changed
	Connected   bool                     // the service holds an open stream of it
	LastSeen    time.Time                // zero: not since the service started
}

// Board holds the latest state of every station. It is an inspection.Observer, never blocks, and keeps no history: a reader that is slow
// misses states, never the newest. It is safe for concurrent use.
type Board struct {
	clock  inspection.Clock
	listed bool

	mu      sync.Mutex
	entries map[inspection.StationID]*boardEntry
	version uint64
	news    chan struct{} // closed and replaced by every change
}

type boardEntry struct {
	State
	streams int
	version uint64 // of its last change
}

// New returns the board of the configured stations; with none, every name is accepted, with an empty line.
func New(stations []inspection.Station, clock inspection.Clock) (*Board, error) {
	b := &Board{clock: clock, listed: len(stations) > 0, entries: map[inspection.StationID]*boardEntry{}, news: make(chan struct{})}
	for _, s := range stations {
		if s.Name == "" || b.entries[s.Name] != nil {
			return nil, fmt.Errorf("station %q: want a name that stands once", s.Name)
		}
		b.entries[s.Name] = &boardEntry{State: State{Station: s}}
	}
	return b, nil
}

// Seed fills in the newest record of each station.
func (b *Board) Seed(ctx context.Context, archive inspection.Archive) error {
	var newest []*inspection.Record
	if b.listed {
		for name := range b.entries {
			page, err := archive.List(ctx, inspection.Filter{Station: name}, 0, 1)
			if err != nil {
				return err
			}
			newest = append(newest, page...)
		}
	} else {
		var err error
		if newest, err = archive.List(ctx, inspection.Filter{}, 0, seedFrom); err != nil {
			return err
		}
	}
	for _, r := range newest {
		b.show(r, time.Time{})
	}
	return nil
}

// Latest returns the state of every station, ordered by line and name.
func (b *Board) Latest() []State {
	states, _, _ := b.Since(0)
	return states
}

// Since returns the states that changed after a version (0: every state), ordered by line and name, with the version that they bring the
// reader to, and a channel that is closed by the next change after it.
func (b *Board) Since(version uint64) (states []State, now uint64, changed <-chan struct{}) {
	b.mu.Lock()
	defer b.mu.Unlock()
	for _, e := range b.entries {
		if version == 0 || e.version > version {
			states = append(states, e.State)
		}
	}
	slices.SortFunc(states, func(x, y State) int { return cmp.Or(cmp.Compare(x.Line, y.Line), cmp.Compare(x.Name, y.Name)) })
	// A board on which nothing happened yet is still version 1 for its reader, so that 0 goes on meaning "everything".
	return states, max(b.version, 1), b.news
}

// Changed returns a channel that is closed by the next change.
func (b *Board) Changed() <-chan struct{} {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.news
}

// Judged is heard and not shown: until it is recorded a verdict is not shown as one.
func (b *Board) Judged(*inspection.Record, time.Duration) {}

// Recorded shows a recorded inspection as the station's last.
func (b *Board) Recorded(r *inspection.Record, _ time.Duration) { b.show(r, b.clock.Now()) }

// Rejected is heard and not shown.
func (b *Board) Rejected(inspection.StationID, inspection.Kind) {}

// show puts a record up unless a later one is there: records of one station may be told of out of order.
func (b *Board) show(r *inspection.Record, seen time.Time) {
	b.mu.Lock()
	defer b.mu.Unlock()
	e := b.entry(r.Begin.Station)
	if e == nil {
		return
	}
	if e.Last != nil && e.Last.Sequence >= r.Sequence {
		return
	}
	e.Last, e.ContactHead, e.Calibration = r, r.Begin.ContactHead, r.Begin.Calibration
	if !seen.IsZero() {
		e.LastSeen = seen
	}
	b.change(e)
}

// Opened notes an open stream of the station; the returned function notes its end.
func (b *Board) Opened(station inspection.StationID) (closed func()) {
	b.stream(station, +1)
	return func() { b.stream(station, -1) }
}

func (b *Board) stream(station inspection.StationID, by int) {
	b.mu.Lock()
	defer b.mu.Unlock()
	e := b.entry(station)
	if e == nil || e.streams+by < 0 {
		return
	}
	e.streams += by
	e.Connected, e.LastSeen = e.streams > 0, b.clock.Now()
	b.change(e)
}

// change marks the entry as changed and wakes the readers. The caller holds mu.
func (b *Board) change(e *boardEntry) {
	// The first change is version 2: see Since.
	b.version = max(b.version, 1) + 1
	e.version = b.version
	close(b.news)
	b.news = make(chan struct{})
}

// entry returns the station's entry, nil where the configuration lists stations and not this one. An unlisted station gets one; where
// that would be too many, the one not connected that was changed longest ago makes room. The caller holds mu.
func (b *Board) entry(station inspection.StationID) *boardEntry {
	e := b.entries[station]
	if e != nil || b.listed {
		return e
	}
	if len(b.entries) >= MaxUnlisted {
		var oldest *boardEntry
		for _, o := range b.entries {
			if o.streams == 0 && (oldest == nil || o.version < oldest.version) {
				oldest = o
			}
		}
		if oldest == nil {
			return nil
		}
		delete(b.entries, oldest.Name)
	}
	e = &boardEntry{State: State{Station: inspection.Station{Name: station}}}
	b.entries[station] = e
	return e
}

// Admits reports whether the configuration knows the station and allows the contact head there.
func (b *Board) Admits(station inspection.StationID, head inspection.ContactHead) error {
	if !b.listed {
		return nil
	}
	b.mu.Lock()
	defer b.mu.Unlock()
	e := b.entries[station]
	if e == nil {
		return inspection.Faultf(inspection.Forbidden, "station", "%q is not in the list of stations", station)
	}
	if !e.Allows(head) {
		return inspection.Faultf(inspection.Forbidden, "contact_head", "%q is not in the list of station %s, %q", head, station, e.ContactHeads)
	}
	return nil
}

// Belongs reports whether the contact head is listed at one of the stations that speaksFor accepts; without lists every head is.
func (b *Board) Belongs(head inspection.ContactHead, speaksFor func(inspection.StationID) bool) bool {
	b.mu.Lock()
	defer b.mu.Unlock()
	if !b.listed {
		return true
	}
	for name, e := range b.entries {
		if speaksFor(name) && e.Allows(head) {
			return true
		}
	}
	return false
}
