package rpc

import (
	"fmt"
	"testing"
	"time"

	"example.com/admit/service/floor"
	"example.com/admit/service/inspection"
)

func names(states []floor.State) string {
	text := ""
	for _, s := range states {
		text += fmt.Sprintf("%s/%s ", s.Line, s.Name)
	}
	return text
}

func TestBoardIsSeededFromTheArchive(t *testing.T) {
	f := newServer(t, nil)
	for i := range 30 {
		f.put([]string{"N1", "N2", "S1"}[i%3], 0)
	}
	for _, c := range []struct {
		name     string
		stations []inspection.Station
		want     string
		last     map[inspection.StationID]uint64
	}{
		{"none listed", nil, "/N1 /N2 /S1 ", map[inspection.StationID]uint64{"N1": 28, "N2": 29, "S1": 30}},
		{"listed", []inspection.Station{{Name: "S1", Line: "South"}, {Name: "S2", Line: "South"}, {Name: "N2", Line: "North"}}, "North/N2 South/S1 South/S2 ",
			map[inspection.StationID]uint64{"N2": 29, "S1": 30}},
	} {
		b, err := floor.New(c.stations, wallClock{})
		if err != nil {
			t.Fatal(err)
		}
		if err := b.Seed(t.Context(), f.store); err != nil {
			t.Fatal(err)
		}
		states := b.Latest()
		if names(states) != c.want {
			t.Errorf("%s: stations %s, want %s", c.name, names(states), c.want)
		}
		for _, s := range states {
			if want := c.last[s.Name]; (s.Last == nil) != (want == 0) || (s.Last != nil && s.Last.Sequence != want) {
				t.Errorf("%s: last of %s is %+v, want sequence %d", c.name, s.Name, s.Last, want)
			}
			if !s.LastSeen.IsZero() || s.Connected {
				t.Errorf("%s: %s was seen before the service started", c.name, s.Name)
			}
		}
	}
}

func TestBoardTellsWhatChanged(t *testing.T) {
	b, err := floor.New([]inspection.Station{{Name: "N1"}, {Name: "N2"}}, wallClock{})
	if err != nil {
		t.Fatal(err)
	}
	all, version, changed := b.Since(0)
	if len(all) != 2 {
		t.Fatalf("%d stations, want 2", len(all))
	}
	if again, _, _ := b.Since(version); len(again) != 0 {
		t.Errorf("without a change %s changed", names(again))
	}
	select {
	case <-changed:
		t.Error("woken without a change")
	default:
	}
	record := func(station inspection.StationID, sequence uint64) *inspection.Record {
		return &inspection.Record{Begin: inspection.Begin{Station: station, ContactHead: "N1-A"}, Sequence: sequence}
	}
	b.Recorded(record("N1", 7), 0)
	<-changed // a missing wake-up would hang here and be seen
	states, later, _ := b.Since(version)
	if names(states) != "/N1 " || states[0].Last.Sequence != 7 || states[0].LastSeen.IsZero() {
		t.Errorf("changed: %+v, want N1 with sequence 7", states)
	}
	b.Recorded(record("N1", 5), 0) // told late: the newest stays
	if states, _, _ := b.Since(later); len(states) != 0 {
		t.Errorf("an older record changed %s", names(states))
	}
	b.Recorded(record("N9", 9), 0)
	if len(b.Latest()) != 2 {
		t.Errorf("a station that is not listed is shown: %s", names(b.Latest()))
	}
	closeOne, closeTwo := b.Opened("N2"), b.Opened("N2")
	closeOne()
	if s := b.Latest()[1]; !s.Connected {
		t.Error("not connected while one of two streams is open")
	}
	closeTwo()
	if s := b.Latest()[1]; s.Connected {
		t.Error("connected without a stream")
	}
	if _, err := floor.New([]inspection.Station{{Name: "N1"}, {Name: "N1"}}, wallClock{}); err == nil {
		t.Error("a station stands twice")
	}
}

// Whatever names come along, the board stays small, and a connected station is never the one to go.
func TestBoardStaysSmall(t *testing.T) {
	b, err := floor.New(nil, wallClock{})
	if err != nil {
		t.Fatal(err)
	}
	b.Opened("N1")
	for i := range 3 * floor.MaxUnlisted {
		b.Recorded(&inspection.Record{Begin: inspection.Begin{Station: inspection.StationID(fmt.Sprint("X", i))}, Sequence: uint64(i + 1)}, time.Second)
	}
	states := b.Latest()
	if len(states) != floor.MaxUnlisted {
		t.Errorf("%d stations, want %d", len(states), floor.MaxUnlisted)
	}
	found := map[inspection.StationID]bool{}
	for _, s := range states {
		found[s.Name] = true
	}
	if !found["N1"] || !found[inspection.StationID(fmt.Sprint("X", 3*floor.MaxUnlisted-1))] || found["X0"] {
		t.Error("want the connected station and the newest, not the oldest")
	}
}
