package rpc

import (
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"log/slog"
	"math/big"
	"net"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/credentials"
	"google.golang.org/grpc/credentials/insecure"
	"google.golang.org/grpc/status"

	"example.com/admit/service/inspection"
)

// authority is a CA made for one test.
type authority struct {
	t    testing.TB
	cert *x509.Certificate
	key  *ecdsa.PrivateKey
}

func newAuthority(t testing.TB) *authority {
	t.Helper()
	a := &authority{t: t}
	a.cert, a.key = a.sign(&x509.Certificate{
		Subject: pkix.Name{CommonName: "Tarnmoor works test CA"}, IsCA: true, BasicConstraintsValid: true, KeyUsage: x509.KeyUsageCertSign,
	})
	return a
}

// sign makes a certificate from a template; what is missing in it is filled in. Without an own certificate it signs itself.
func (a *authority) sign(template *x509.Certificate) (*x509.Certificate, *ecdsa.PrivateKey) {
	a.t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		a.t.Fatal(err)
	}
	serial, err := rand.Int(rand.Reader, big.NewInt(1<<62))
	if err != nil {
		a.t.Fatal(err)
	}
	template.SerialNumber = serial
	if template.NotBefore.IsZero() {
		template.NotBefore = time.Now().Add(-time.Hour)
	}
	if template.NotAfter.IsZero() {
		template.NotAfter = time.Now().Add(time.Hour)
	}
	parent, signer := a.cert, a.key
	if parent == nil {
		parent, signer = template, key
	}
	der, err := x509.CreateCertificate(rand.Reader, template, parent, &key.PublicKey, signer)
	if err != nil {
		a.t.Fatal(err)
	}
	cert, err := x509.ParseCertificate(der)
	if err != nil {
		a.t.Fatal(err)
	}
	return cert, key
}

func (a *authority) pool() *x509.CertPool {
	p := x509.NewCertPool()
	p.AddCert(a.cert)
	return p
}

func (a *authority) pem() []byte {
	return pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: a.cert.Raw})
}

// pair makes a key pair for TLS.
func (a *authority) pair(template *x509.Certificate) tls.Certificate {
	cert, key := a.sign(template)
	return tls.Certificate{Certificate: [][]byte{cert.Raw}, PrivateKey: key, Leaf: cert}
}

// client is the template of a caller's certificate.
func client(names ...string) *x509.Certificate {
	return &x509.Certificate{DNSNames: names, ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageClientAuth}}
}

// server is the template of the server's certificate.
func server() *x509.Certificate {
	return &x509.Certificate{
		DNSNames: []string{"admit.floor.example"}, IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)}, ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth},
	}
}

// write puts a certificate, its key and the callers' CA into a folder.
func (a *authority) write(dir string, template *x509.Certificate, callers []byte) CertificateFiles {
	a.t.Helper()
	cert, key := a.sign(template)
	der, err := x509.MarshalPKCS8PrivateKey(key)
	if err != nil {
		a.t.Fatal(err)
	}
	files := CertificateFiles{filepath.Join(dir, "server.pem"), filepath.Join(dir, "server-key.pem"), filepath.Join(dir, "callers.pem")}
	for name, content := range map[string][]byte{
		files.Certificate: pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: cert.Raw}),
		files.Key:         pem.EncodeToMemory(&pem.Block{Type: "PRIVATE KEY", Bytes: der}),
		files.CallerCAs:   callers,
	} {
		if err := os.WriteFile(name, content, 0o600); err != nil {
			a.t.Fatal(err)
		}
	}
	return files
}

// newSecureFloor returns a server that answers by TLS, with its CA and its certificate files. now is what its certificates take for time.
func newSecureFloor(t *testing.T, now func() time.Time, change func(*Options)) (*testFloor, *authority, CertificateFiles) {
	t.Helper()
	ca := newAuthority(t)
	files := ca.write(t.TempDir(), server(), ca.pem())
	f := newServer(t, func(o *Options) {
		certificates, err := OpenCertificates(files, o.Log, now)
		if err != nil {
			t.Fatal(err)
		}
		o.TLS = certificates
		o.SignsOfLife = 5 * time.Millisecond
		o.Access.Callers = map[string]Grant{
			"n1.floor.example":                  {Permissions: Permissions(), Stations: []inspection.StationID{"N1"}},
			"n2.floor.example":                  {Permissions: Permissions(), Stations: []inspection.StationID{"N2"}},
			"spiffe://floor.example/station/n1": {Permissions: Permissions(), Stations: []inspection.StationID{"N1"}},
		}
		if change != nil {
			change(o)
		}
	})
	f.serve(Listener{Listener: f.listen()})
	return f, ca, files
}

// dialAs connects with a certificate, nil: none.
func (f *testFloor) dialAs(ca *authority, pair *tls.Certificate, change func(*tls.Config)) *grpc.ClientConn {
	c := &tls.Config{RootCAs: ca.pool(), ServerName: "127.0.0.1"}
	if pair != nil {
		// Shown whatever CAs the server asks for: a caller who means harm does not ask first.
		c.GetClientCertificate = func(*tls.CertificateRequestInfo) (*tls.Certificate, error) { return pair, nil }
	}
	if change != nil {
		change(c)
	}
	return f.dial(grpc.WithTransportCredentials(credentials.NewTLS(c)))
}

// The certificate cases of promise P16, each against every method: refused, and nothing is recorded.
func TestCertificateCases(t *testing.T) {
	f, ca, _ := newSecureFloor(t, time.Now, nil)
	strange := newAuthority(t)
	own := authority{t: t}
	at := func(template *x509.Certificate, from, until time.Duration) *x509.Certificate {
		template.NotBefore, template.NotAfter = time.Now().Add(from), time.Now().Add(until)
		return template
	}
	uri := func(text string) *x509.Certificate {
		u, err := url.Parse(text)
		if err != nil {
			t.Fatal(err)
		}
		c := client()
		c.URIs = []*url.URL{u}
		return c
	}
	pair := func(a *authority, template *x509.Certificate) *tls.Certificate {
		p := a.pair(template)
		return &p
	}
	cn := client()
	cn.Subject = pkix.Name{CommonName: "n1.floor.example"}
	mail := client()
	mail.EmailAddresses = []string{"n1.floor.example@floor.example"}
	serverUse := server()
	serverUse.DNSNames = []string{"n1.floor.example"}
	for _, c := range []struct {
		name   string
		pair   *tls.Certificate
		change func(*tls.Config)
		good   bool
	}{
		{"listed DNS name", pair(ca, client("n1.floor.example")), nil, true},
		{"listed DNS name in capitals", pair(ca, client("N1.Floor.Example")), nil, true},
		{"listed URI", pair(ca, uri("spiffe://floor.example/station/n1")), nil, true},
		{"listed name beside an unlisted one", pair(ca, client("n1.floor.example", "n1-b.floor.example")), nil, true},
		{"TLS 1.2", pair(ca, client("n1.floor.example")), func(c *tls.Config) { c.MaxVersion = tls.VersionTLS12 }, true},

		{"none", nil, nil, false},
		{"expired", pair(ca, at(client("n1.floor.example"), -2*time.Hour, -time.Hour)), nil, false},
		{"not yet valid", pair(ca, at(client("n1.floor.example"), time.Hour, 2*time.Hour)), nil, false},
		{"other CA", pair(strange, client("n1.floor.example")), nil, false},
		{"right CA, other name", pair(ca, client("n9.floor.example")), nil, false},
		{"name only in the common name", pair(ca, cn), nil, false},
		{"wildcard", pair(ca, client("*.floor.example")), nil, false},
		{"self-signed", pair(&own, client("n1.floor.example")), nil, false},
		{"server certificate used by a client", pair(ca, serverUse), nil, false},
		{"two listed names", pair(ca, client("n1.floor.example", "n2.floor.example")), nil, false},
		{"name only as a mail address", pair(ca, mail), nil, false},
		{"other URI", pair(ca, uri("spiffe://floor.example/station/n1/")), nil, false},
		{"TLS 1.1 offered", pair(ca, client("n1.floor.example")), func(c *tls.Config) { c.MinVersion, c.MaxVersion = tls.VersionTLS10, tls.VersionTLS11 }, false},
	} {
		t.Run(c.name, func(t *testing.T) {
			conn := f.dialAs(ca, c.pair, c.change)
			defer conn.Close()
			logged := f.log.since()
			for _, m := range methodsOf(f.server) {
				err := callEmpty(conn, m)
				code := status.Code(err)
				if refused := code == codes.PermissionDenied || code == codes.Unavailable; refused == c.good {
					t.Errorf("%s: %v, want let in %v", m, err, c.good)
				}
			}
			if c.good && strings.Contains(logged(), "msg=security") {
				t.Errorf("a security line about a good caller:\n%s", logged())
			}
			if !c.good { // the alert may reach the caller before the line is written
				eventually(t, "a security line", func() bool { return strings.Contains(logged(), "msg=security") })
			}
		})
	}
	t.Run("plain", func(t *testing.T) {
		conn := f.dial(grpc.WithTransportCredentials(insecure.NewCredentials()))
		for _, m := range methodsOf(f.server) {
			if err := callEmpty(conn, m); status.Code(err) != codes.Unavailable {
				t.Errorf("%s: %v, want no connection", m, err)
			}
		}
	})
	t.Run("removed from the list", func(t *testing.T) {
		conn := f.dialAs(ca, pair(ca, client("n1.floor.example")), nil)
		mustRecord(t, conn, newUnit("N1", "TM0000001"))
		if err := f.server.SetAccess(Access{Callers: map[string]Grant{"n2.floor.example": {Permissions: Permissions()}}}); err != nil {
			t.Fatal(err)
		}
		for _, m := range methodsOf(f.server) {
			if err := callEmpty(conn, m); status.Code(err) != codes.PermissionDenied {
				t.Errorf("%s on the connection that was open: %v, want PermissionDenied", m, err)
			}
		}
	})
	if f.store.Last() != 1 {
		t.Errorf("%d records, want the one of the good caller", f.store.Last())
	}
}

func TestStationNamingAnotherStation(t *testing.T) {
	f, ca, _ := newSecureFloor(t, time.Now, nil)
	p := ca.pair(client("n1.floor.example"))
	conn := f.dialAs(ca, &p, nil)
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
	if r, _, _ := f.store.Find(t.Context(), lastID(t, f)); r == nil || r.Caller != "n1.floor.example" {
		t.Errorf("recorded as sent by %+v, want the certificate's name", r)
	}
	logged := f.log.since()
	_, err := inspectAll(t.Context(), conn, newUnit("N2", "TM0000002").messages())
	wantRefused(t, err, codes.PermissionDenied, "station")
	if text := logged(); lines(text, "msg=security event=inspection_refused caller=n1.floor.example") != 1 || !strings.Contains(text, "N2") {
		t.Errorf("want one security line with both names, got\n%s", text)
	}
	if f.store.Last() != 1 {
		t.Error("recorded in another station's name")
	}
}

func lastID(t *testing.T, f *testFloor) inspection.ID {
	t.Helper()
	page, err := f.store.List(t.Context(), inspection.Filter{}, 0, 1)
	if err != nil || len(page) == 0 {
		t.Fatal("no record", err)
	}
	return page[0].Begin.ID
}

// A client certificate does not make a server: callers refuse it, and a server does not start with it.
func TestClientCertificateUsedAsServer(t *testing.T) {
	ca := newAuthority(t)
	template := client("admit.floor.example")
	template.IPAddresses = []net.IP{net.IPv4(127, 0, 0, 1)}
	files := ca.write(t.TempDir(), template, ca.pem())
	if _, err := OpenCertificates(files, slog.New(slog.DiscardHandler), time.Now); err == nil || !strings.Contains(err.Error(), "serverAuth") {
		t.Errorf("a client certificate was taken for the server: %v", err)
	}
	pair, err := tls.LoadX509KeyPair(files.Certificate, files.Key)
	if err != nil {
		t.Fatal(err)
	}
	l, err := tls.Listen("tcp", "127.0.0.1:0", &tls.Config{Certificates: []tls.Certificate{pair}, NextProtos: []string{"h2"}})
	if err != nil {
		t.Fatal(err)
	}
	impostor := grpc.NewServer()
	done := make(chan struct{})
	go func() { defer close(done); _ = impostor.Serve(l) }() // ends with Stop
	defer func() { impostor.Stop(); <-done }()
	mine := ca.pair(client("n1.floor.example"))
	f := &testFloor{t: t, address: l.Addr().String()}
	conn := f.dialAs(ca, &mine, nil)
	if err := callEmpty(conn, "/admit.v1.StoreService/GetStoreStatus"); status.Code(err) != codes.Unavailable || !strings.Contains(err.Error(), "certificate") {
		t.Errorf("the caller took an impostor for the server: %v", err)
	}
}

// A certificate that expires while its connection is open ends its caller's rights.
func TestCertificateExpiresDuringAConnection(t *testing.T) {
	var clock steppedClock
	f, ca, _ := newSecureFloor(t, time.Now, func(o *Options) { o.Desk.Clock = &clock })
	p := ca.pair(client("n1.floor.example"))
	conn := f.dialAs(ca, &p, nil)
	mustRecord(t, conn, newUnit("N1", "TM0000001"))
	clock.add(2 * time.Hour)
	_, err := inspectAll(t.Context(), conn, newUnit("N1", "TM0000002").messages())
	wantRefused(t, err, codes.PermissionDenied, "caller")
}
