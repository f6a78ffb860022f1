package rpc

import (
	"errors"
	"fmt"
	"maps"
	"slices"
	"strings"

	"example.com/admit/service/inspection"
)

// Loopback is the name of a caller on this machine who comes without TLS.
const Loopback = "loopback"

// Access says who may do what. A caller who is not in it may do nothing. It is never written once it is in use.
type Access struct {
	// Callers by name: a DNS name (n1.floor.example) or a URI (spiffe://floor.example/station/n1) that stands in the client's
	// certificate as a subject alternative name. No wildcards.
	Callers map[string]Grant
	// Loopback is what a caller on a loopback address without TLS may do; nil: everything, for every station.
	Loopback *Grant
}

// Grant is what one caller may do.
type Grant struct {
	Permissions []Permission
	// Stations that the caller may speak for with the permission fixture; none listed: none.
	Stations []inspection.StationID
	// EveryStation: it may speak for any station.
	EveryStation bool
}

// Check returns every fault of the configuration at once, joined.
func (a *Access) Check() error {
	var faults []error
	seen := map[string]bool{}
	for _, name := range slices.Sorted(maps.Keys(a.Callers)) {
		g := a.Callers[name]
		plain := canonicalName(name)
		switch {
		case name == "" || strings.ContainsAny(name, " \t\r\n"):
			faults = append(faults, fmt.Errorf("caller %q: want a DNS name or a URI without spaces", name))
		case strings.Contains(name, "*"):
			faults = append(faults, fmt.Errorf("caller %q: want one whole name, wildcards are not taken", name))
		case plain == Loopback:
			faults = append(faults, fmt.Errorf("caller %q: want a name of a certificate, this one stands for callers without TLS", name))
		case seen[plain]:
			faults = append(faults, fmt.Errorf("caller %q: stands twice, DNS names are the same in capitals and small letters", name))
		}
		seen[plain] = true
		faults = append(faults, g.check(fmt.Sprintf("caller %q", name))...)
	}
	if a.Loopback != nil {
		faults = append(faults, a.Loopback.check(Loopback)...)
	}
	return errors.Join(faults...)
}

func (g *Grant) check(whose string) []error {
	var faults []error
	for _, p := range g.Permissions {
		if !slices.Contains(Permissions(), p) {
			faults = append(faults, fmt.Errorf("%s: want permissions out of %v, got %q", whose, Permissions(), p))
		}
	}
	for _, s := range g.Stations {
		if s == "" || strings.Contains(string(s), "*") {
			faults = append(faults, fmt.Errorf("%s: want whole names of stations, got %q", whose, s))
		}
	}
	return faults
}

// canonicalName returns a DNS name in small letters; a URI (it has a colon) stays as it is.
func canonicalName(name string) string {
	if strings.Contains(name, ":") {
		return name
	}
	return strings.ToLower(name)
}

// everything is what loopback may do where the configuration does not narrow it.
func everything() *Grant { return &Grant{Permissions: Permissions(), EveryStation: true} }

// book is an Access made ready for look-ups.
type book struct {
	callers  map[string]*Grant
	loopback *Grant
}

func newBook(a Access) *book {
	b := &book{callers: make(map[string]*Grant, len(a.Callers)), loopback: a.Loopback}
	for name, g := range a.Callers {
		b.callers[canonicalName(name)] = &g
	}
	if b.loopback == nil {
		b.loopback = everything()
	}
	return b
}

// named returns the grant of a caller; ok false: not in the book.
func (b *book) named(name string) (g *Grant, ok bool) {
	if name == Loopback {
		return b.loopback, true
	}
	g, ok = b.callers[name]
	return g, ok
}

// Caller is who is calling, and what he may do.
type Caller struct {
	Name  string
	grant *Grant
}

// May reports whether the caller has any of the permissions.
func (c Caller) May(any ...Permission) bool { return c.grant != nil && c.grant.may(any...) }

// SpeaksFor reports whether the caller may speak for the station.
func (c Caller) SpeaksFor(station inspection.StationID) bool {
	return c.grant != nil && (c.grant.EveryStation || slices.Contains(c.grant.Stations, station))
}
