package rpc

import (
	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/sweep"
	"example.com/admit/service/wire"
)

// intake takes the sweeps of one inspection off the wire, header by header and chunk by chunk, within the limits: what is declared is held
// against them before a sample arrives, what arrives is held against the budget of all inspections.
type intake struct {
	budget   *budget
	assembly wire.Assembly
	headers  int
	declared int // points, of all headers
	taken    int // points, from the budget
}

// header begins the next sweep, and returns what is said of it.
func (t *intake) header(m *pb.SweepHeader) (h inspection.SweepHeader, err error) {
	if t.assembly.Open() {
		return h, malformed("header", "want the remaining samples of sweep %d first, got the header of another", t.headers-1)
	}
	if t.headers == inspection.MaxSweeps {
		return h, malformed("header", "want at most %d sweeps in one inspection, got one more", inspection.MaxSweeps)
	}
	if int64(m.GetIndex()) != int64(t.headers) {
		return h, malformed("header.index", "want %d, the number of sweeps before it, got %d", t.headers, m.GetIndex())
	}
	if h, err = wire.HeaderFromProto(m); err != nil {
		return h, within("header", err)
	}
	if t.declared += h.Points; t.declared > inspection.MaxSample {
		return h, malformed("header.points", "want at most %d points in one inspection, got %d", inspection.MaxSample, t.declared)
	}
	t.headers++
	t.assembly.Start(h)
	return h, nil
}

// samples adds a chunk; when it completes its sweep, that is returned with done true.
func (t *intake) samples(m *pb.SweepSamples) (w sweep.Sweep, done bool, err error) {
	n := len(m.GetRe())
	if err := t.budget.take(n); err != nil {
		return w, false, err
	}
	t.taken += n
	return t.assembly.Add(m)
}

// end checks that nothing is missing.
func (t *intake) end() error {
	if t.assembly.Open() {
		return malformed("samples", "want the remaining samples of sweep %d first, got the end", t.headers-1)
	}
	return nil
}

// release gives back what was taken from the budget.
func (t *intake) release() {
	t.budget.give(t.taken)
	t.taken = 0
}

// within puts the name of the surrounding message in front of a fault's field.
func within(parent string, err error) error {
	if f, ok := err.(*inspection.Fault); ok && f.Field != "" {
		return &inspection.Fault{Kind: f.Kind, Field: parent + "." + f.Field, Err: f.Err}
	}
	return err
}

// checkName holds a name of a request against the limit of names.
func checkName(field, name string, required bool) error {
	if required && name == "" {
		return malformed(field, "want a name, got nothing")
	}
	if len(name) > inspection.MaxText {
		return malformed(field, "want at most %d bytes, got %d", inspection.MaxText, len(name))
	}
	for _, r := range name {
		if r < ' ' || r == 0x7f {
			return malformed(field, "want printable characters, got %q", name)
		}
	}
	return nil
}
