package inspection

import "example.com/admit/service/network"

// Station is one test position as the server's configuration describes it.
type Station struct {
	Name         StationID
	Line         string
	Network      network.Kind
	ContactHeads []ContactHead // that may be used there; none: any
}

// Allows reports whether the contact head may be used at the station.
func (s *Station) Allows(head ContactHead) bool {
	if len(s.ContactHeads) == 0 {
		return true
	}
	for _, h := range s.ContactHeads {
		if h == head {
			return true
		}
	}
	return false
}
