// Package rpc serves the wire contract admit.v1: by gRPC, and its reading calls by JSON over HTTP. Handlers are thin: a message is turned
// into the domain's words by package wire, the inspection.Desk does the work, the answer is turned back. What the package adds is the
// edge itself:
//
//   - who is calling: the subject alternative name of a verified client certificate, or loopback ([Access], [Certificates]);
//   - what a caller may do: one table of methods and permissions that denies what it does not list (permission.go);
//   - how a fault is said: one table from inspection.Kind to gRPC codes and details (fault.go);
//   - how much is taken at once: message size, streams, points in memory, time without progress (limits.go);
//   - what the stations were last seen doing ([floor.Board]);
//   - how it ends: health first, streams told, a grace period, then by force ([Server.Serve]).
//
// A request by HTTP travels through the same gRPC server over a connection inside the process, so that there is one permission check and
// one set of limits (gateway.go).
package rpc
