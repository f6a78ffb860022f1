package rpc

import (
	"context"
	"errors"
	"io"
	"log/slog"
	"net"
	"sync"

	"google.golang.org/grpc/credentials"
)

// Listener is one address that the server listens on. Plain: callers come without TLS; allowed on a loopback address only.
type Listener struct {
	net.Listener
	Plain bool
}

// check refuses what would let a caller in without a certificate from outside.
func (l Listener) check(tls bool) error {
	switch {
	case l.Plain && !loopbackAddress(l.Addr()):
		return errors.New("address " + l.Addr().String() + ": want TLS on any address but loopback")
	case !l.Plain && !tls:
		return errors.New("address " + l.Addr().String() + ": want a certificate, a key and the CA of the callers for TLS")
	}
	return nil
}

// How a connection came in is marked on the connection itself by the listener that accepted it, so that no address and no byte from
// outside takes part in the decision.
type (
	plainConn  struct{ net.Conn }
	inwardConn struct{ net.Conn }
)

// plainListener marks what it accepts as plain.
type plainListener struct{ net.Listener }

func (l plainListener) Accept() (net.Conn, error) {
	c, err := l.Listener.Accept()
	if err != nil {
		return nil, err
	}
	return plainConn{c}, nil
}

// doors are the transport credentials of the server: nothing for marked connections, TLS with client certificates for the others.
type doors struct {
	tls credentials.TransportCredentials // nil: no TLS
	log *slog.Logger
}

type loopbackInfo struct{ credentials.CommonAuthInfo }

func (loopbackInfo) AuthType() string { return "loopback" }

type inwardInfo struct{ credentials.CommonAuthInfo }

func (inwardInfo) AuthType() string { return "in-process" }

// ServerHandshake decides by the mark on the connection.
func (d doors) ServerHandshake(c net.Conn) (net.Conn, credentials.AuthInfo, error) {
	local := credentials.CommonAuthInfo{SecurityLevel: credentials.NoSecurity}
	switch m := c.(type) {
	case plainConn:
		return m.Conn, loopbackInfo{local}, nil
	case inwardConn:
		return m.Conn, inwardInfo{local}, nil
	}
	if d.tls == nil {
		return nil, nil, errors.New("no TLS is configured")
	}
	conn, info, err := d.tls.ServerHandshake(c)
	if err != nil && !errors.Is(err, io.EOF) {
		d.log.LogAttrs(context.Background(), slog.LevelWarn, "security",
			slog.String("event", "handshake_refused"), slog.String("remote", c.RemoteAddr().String()), slog.Any("error", err))
	}
	return conn, info, err
}

// ClientHandshake is never used: the server dials no one.
func (d doors) ClientHandshake(context.Context, string, net.Conn) (net.Conn, credentials.AuthInfo, error) {
	return nil, nil, errors.New("these credentials are a server's")
}

// Info says what stands to be said of the credentials.
func (d doors) Info() credentials.ProtocolInfo {
	return credentials.ProtocolInfo{SecurityProtocol: "tls"}
}

// Clone returns the credentials themselves: they hold nothing that changes.
func (d doors) Clone() credentials.TransportCredentials { return d }

// OverrideServerName does nothing; a server has no name to expect.
func (d doors) OverrideServerName(string) error { return nil }

// inwardListener hands out connections inside the process: each Dial makes a pair of pipes.
type inwardListener struct {
	conns  chan net.Conn
	closed chan struct{}
	once   sync.Once
}

func newInwardListener() *inwardListener {
	return &inwardListener{conns: make(chan net.Conn), closed: make(chan struct{})}
}

// Accept waits for a Dial.
func (l *inwardListener) Accept() (net.Conn, error) {
	select {
	case c := <-l.conns:
		return inwardConn{c}, nil
	case <-l.closed:
		return nil, net.ErrClosed
	}
}

// Dial returns the caller's end of a new connection.
func (l *inwardListener) Dial(ctx context.Context) (net.Conn, error) {
	mine, theirs := net.Pipe()
	select {
	case l.conns <- theirs:
		return mine, nil
	case <-l.closed:
		return nil, net.ErrClosed
	case <-ctx.Done():
		return nil, ctx.Err()
	}
}

// Close ends the listener; connections that were made go on.
func (l *inwardListener) Close() error {
	l.once.Do(func() { close(l.closed) })
	return nil
}

// Addr returns a name, there is no address.
func (l *inwardListener) Addr() net.Addr { return inwardAddr{} }

type inwardAddr struct{}

func (inwardAddr) Network() string { return "in-process" }
func (inwardAddr) String() string  { return "in-process" }
