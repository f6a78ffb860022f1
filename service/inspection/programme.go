package inspection

import (
	"sync"

	"example.com/admit/service/network"
	"example.com/admit/service/parttype"
	"example.com/admit/service/plan"
)

// programmes remembers the programme of each part type under each calibration: it depends on nothing else, and to work it out means to
// solve the calibration.
type programmes struct {
	mu    sync.Mutex
	known map[programmeKey][]plan.Sweep
}

type programmeKey struct {
	part        *parttype.PartType
	calibration *network.Calibration
}

// mostProgrammes bounds what is remembered; beyond it everything is worked out again.
const mostProgrammes = 1024

// Programme returns the sweeps that the inspection's part type asks for at this station, in measuring order; none where no calibration says
// what the station is, and the fixture follows a programme of its own.
func (s *Session) Programme() []plan.Sweep {
	if s.c.Calibration == nil {
		return nil
	}
	key := programmeKey{s.c.PartType, s.c.Calibration}
	p := &s.desk.programmes
	p.mu.Lock()
	sweeps, ok := p.known[key]
	p.mu.Unlock()
	if ok {
		return sweeps
	}
	if station, ok := plan.CalibratedStation(s.c.Calibration); ok {
		sweeps = plan.For(s.c.PartType, station)
	}
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.known == nil || len(p.known) >= mostProgrammes {
		p.known = map[programmeKey][]plan.Sweep{}
	}
	p.known[key] = sweeps
	return sweeps
}
