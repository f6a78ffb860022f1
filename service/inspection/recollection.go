package inspection

import (
	"context"
	"sync"
)

// Recollection tells the background of an inspection. It remembers of the newest ones the last unit of each station, and the last units of each
// lot that passed, so that the next inspection need not ask the store for them; what it does not know yet it asks once. It may forget
// at any time, and be wrong in nothing but how much it knows: what it gave is recorded with the judgement that used it. It is safe for
// concurrent use; a nil Recollection knows nothing.
type Recollection struct {
	history History

	mu       sync.Mutex
	stations map[StationID]trace
	lots     map[lotKey][]*PreviousUnit // oldest first
}

// NewRecollection returns a Recollection of what a store holds.
func NewRecollection(h History) *Recollection {
	return &Recollection{history: h, stations: map[StationID]trace{}, lots: map[lotKey][]*PreviousUnit{}}
}

type lotKey struct {
	partType string
	lot      Lot
}

// mostRemembered is how many stations, and how many lots, are remembered; beyond it everything is asked for again.
const mostRemembered = 4096

// lotPage is how many records of a lot are looked through for its median when it is met for the first time.
const lotPage = 2 * lotUnits

// previous returns the newest inspection at a station.
func (m *Recollection) previous(ctx context.Context, station StationID) (trace, error) {
	m.mu.Lock()
	t, ok := m.stations[station]
	m.mu.Unlock()
	if ok {
		return t, nil
	}
	page, err := m.history.List(ctx, Filter{Station: station}, 0, 1)
	if err != nil {
		return t, err
	}
	if len(page) > 0 && page[0].Begin.Purpose == Production {
		t = traceOf(page[0])
	}
	m.mu.Lock()
	defer m.mu.Unlock()
	if newer, ok := m.stations[station]; ok && newer.sequence > t.sequence {
		return newer, nil
	}
	m.keepStation(station, t)
	return t, nil
}

func (m *Recollection) keepStation(station StationID, t trace) {
	if len(m.stations) >= mostRemembered {
		m.stations = map[StationID]trace{}
	}
	m.stations[station] = t
}

// median returns the running medians of a lot, nil when they are not known.
func (m *Recollection) median(ctx context.Context, key lotKey) (*LotMedian, error) {
	if key.lot == "" {
		return nil, nil
	}
	m.mu.Lock()
	units, ok := m.lots[key]
	median := medianOf(units)
	m.mu.Unlock()
	if ok {
		return median, nil
	}
	page, err := m.history.List(ctx, Filter{Lot: key.lot}, 0, lotPage)
	if err != nil {
		return nil, err
	}
	units = nil
	for i := len(page) - 1; i >= 0; i-- {
		if t := traceOf(page[i]); t.passed && t.unit != nil && t.partType == key.partType && page[i].Begin.Purpose == Production {
			units = append(units, t.unit)
		}
	}
	units = units[max(0, len(units)-lotUnits):]
	m.mu.Lock()
	defer m.mu.Unlock()
	if len(m.lots) >= mostRemembered {
		m.lots = map[lotKey][]*PreviousUnit{}
	}
	if _, ok := m.lots[key]; !ok { // unless somebody was faster, whose list is newer
		m.lots[key] = units
	}
	return medianOf(m.lots[key]), nil
}

// add remembers a recorded inspection of production.
func (m *Recollection) add(r *Record) {
	if m == nil || r.Begin.Purpose != Production {
		return
	}
	t := traceOf(r)
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.stations[r.Begin.Station].sequence < t.sequence {
		m.keepStation(r.Begin.Station, t)
	}
	key := lotKey{t.partType, r.Begin.Unit.Lot}
	if units, ok := m.lots[key]; ok && t.passed && t.unit != nil { // a lot that nobody asked for is read from the store when somebody does
		if len(units) == lotUnits {
			units = append([]*PreviousUnit(nil), units[1:]...)
		}
		m.lots[key] = append(units, t.unit)
	}
}

// background gathers what earlier inspections tell about a case. Only production has a background: whoever studies a unit looks at it again and again.
func (m *Recollection) background(ctx context.Context, c *Case) (Background, error) {
	var b Background
	begin := &c.Begin
	if m == nil || begin.Purpose != Production {
		return b, nil
	}
	earlier, err := m.history.OfUnit(ctx, begin.Purpose, begin.Unit, c.PartType.Name, mostAttempts)
	if err != nil {
		return b, err
	}
	b.attempts(earlier, c.PartType.Version)
	previous, err := m.previous(ctx, begin.Station)
	if err != nil {
		return b, err
	}
	if previous.unit != nil && previous.partType == c.PartType.Name {
		b.Previous = previous.unit
	}
	b.Lot, err = m.median(ctx, lotKey{c.PartType.Name, begin.Unit.Lot})
	return b, err
}
