package rpc

import (
	"context"
	"crypto/x509"
	"net"
	"net/http"
	"strings"

	"google.golang.org/grpc/credentials"
	"google.golang.org/grpc/metadata"
	"google.golang.org/grpc/peer"

	"example.com/admit/service/inspection"
)

// callerKey is the metadata key under which a request by HTTP carries its caller's name through the process. It counts on the connection
// inside the process only, which no one else can open; from anywhere else it is ignored.
const callerKey = "admit-caller"

// caller returns who made the call. The look-up is made for each call and not for each connection, so that a caller who is taken
// out of the configuration is out at once.
func (s *Server) caller(ctx context.Context) (Caller, error) {
	p, ok := peer.FromContext(ctx)
	if !ok {
		return Caller{}, forbidden("the call has no peer")
	}
	switch info := p.AuthInfo.(type) {
	case loopbackInfo:
		return Caller{Loopback, s.book.Load().loopback}, nil
	case inwardInfo:
		names := metadata.ValueFromIncomingContext(ctx, callerKey)
		if len(names) != 1 {
			return Caller{}, forbidden("the call has no caller")
		}
		g, ok := s.book.Load().named(names[0])
		if !ok {
			return Caller{}, forbidden("%q is not in the list of callers", names[0])
		}
		return Caller{names[0], g}, nil
	case credentials.TLSInfo:
		return s.certified(info.State.VerifiedChains)
	}
	return Caller{}, forbidden("the call comes without identity")
}

// certified returns the caller whose certificate was verified. Only DNS and URI names count, never the common name, and of these exactly
// one must be in the list: a certificate with two listed names does not say who is calling.
func (s *Server) certified(chains [][]*x509.Certificate) (Caller, error) {
	if len(chains) == 0 || len(chains[0]) == 0 {
		return Caller{}, forbidden("no verified client certificate")
	}
	leaf := chains[0][0]
	// A connection may outlive the certificate that it began with.
	if now := s.desk.Clock.Now(); now.After(leaf.NotAfter) {
		return Caller{}, forbidden("the client certificate expired at %s", leaf.NotAfter.UTC().Format("2006-01-02T15:04:05Z"))
	}
	book := s.book.Load()
	var found Caller
	names := certificateNames(leaf)
	for _, name := range names {
		g, ok := book.callers[name]
		if !ok || name == found.Name {
			continue
		}
		if found.grant != nil {
			return Caller{}, forbidden("the client certificate names two callers, %q and %q", found.Name, name)
		}
		found = Caller{name, g}
	}
	if found.grant == nil {
		return Caller{}, forbidden("none of the certificate's names %q is in the list of callers", names)
	}
	return found, nil
}

// certificateNames returns the DNS and URI names of a certificate; a wildcard is no name of anyone.
func certificateNames(leaf *x509.Certificate) []string {
	var names []string
	for _, n := range leaf.DNSNames {
		if !strings.Contains(n, "*") {
			names = append(names, canonicalName(n))
		}
	}
	for _, u := range leaf.URIs {
		if n := u.String(); !strings.Contains(n, "*") {
			names = append(names, n)
		}
	}
	return names
}

// HTTPCaller returns who made a request by HTTP: by the verified certificate of a TLS connection; without TLS loopback, if both ends of
// the connection are loopback addresses and the request was meant for this machine. The last keeps a page of a foreign site, whose name
// was pointed at this machine, from reading as loopback.
func (s *Server) HTTPCaller(r *http.Request) (Caller, error) {
	if r.TLS != nil {
		return s.certified(r.TLS.VerifiedChains)
	}
	local, _ := r.Context().Value(http.LocalAddrContextKey).(net.Addr)
	if !loopbackAddress(local) || !loopbackHost(r.RemoteAddr) {
		return Caller{}, forbidden("the request comes without TLS from elsewhere")
	}
	if !loopbackHost(r.Host) {
		return Caller{}, forbidden("the request without TLS is meant for another host, %q", clip(r.Host))
	}
	return Caller{Loopback, s.book.Load().loopback}, nil
}

// Guard lets a request through to next if its caller has any of the permissions. It is for pages that are no part of the contract.
func (s *Server) Guard(next http.Handler, any ...Permission) http.Handler {
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		c, err := s.HTTPCaller(r)
		if err == nil && !c.May(any...) {
			err = forbidden("%q has none of the permissions %v", c.Name, any)
		}
		if err != nil {
			s.security(r.Context(), "request_refused", c.Name, r.URL.Path, err)
			http.Error(w, err.Error(), http.StatusForbidden)
			return
		}
		next.ServeHTTP(w, r)
	})
}

func loopbackAddress(a net.Addr) bool {
	t, ok := a.(*net.TCPAddr)
	return ok && t.IP.IsLoopback()
}

// loopbackHost reports whether a host, with or without port, is this machine by a loopback address or as localhost.
func loopbackHost(host string) bool {
	if h, _, err := net.SplitHostPort(host); err == nil {
		host = h
	}
	host = strings.TrimSuffix(strings.TrimPrefix(host, "["), "]")
	ip := net.ParseIP(host)
	return strings.EqualFold(host, "localhost") || (ip != nil && ip.IsLoopback())
}

func forbidden(format string, args ...any) error {
	return inspection.Faultf(inspection.Forbidden, "caller", format, args...)
}

// clip shortens a text that came from outside for a message or the log.
func clip(text string) string {
	if len(text) <= inspection.MaxText {
		return text
	}
	return strings.ToValidUTF8(text[:inspection.MaxText], "") + "..."
}
