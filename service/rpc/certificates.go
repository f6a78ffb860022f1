package rpc

import (
	"crypto/sha256"
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"log/slog"
	"os"
	"slices"
	"sync"
	"time"
)

// CertificateFiles names the files of the server's identity, all PEM.
type CertificateFiles struct {
	Certificate string // the server's certificate, then its intermediates
	Key         string // its private key
	CallerCAs   string // the CAs whose certificates callers may show
}

// Certificates holds the server's identity as it stands in the files. Files that change are taken up by the next handshake; files that
// are broken are not, the old ones stay until they are mended. It is safe for concurrent use.
type Certificates struct {
	files CertificateFiles
	log   *slog.Logger
	now   func() time.Time

	mu       sync.Mutex
	looked   time.Time // when the files were last read
	seen     [sha256.Size]byte
	current  *tls.Config
	expires  time.Time
	loads    uint64
	failures uint64
}

// lookEvery is how often handshakes look at the files at most.
const lookEvery = time.Second

// OpenCertificates reads the files; at start they must be good. now is the wall clock.
func OpenCertificates(files CertificateFiles, log *slog.Logger, now func() time.Time) (*Certificates, error) {
	c := &Certificates{files: files, log: log, now: now}
	content, err := files.read()
	if err != nil {
		return nil, err
	}
	if c.current, c.expires, err = content.config(); err != nil {
		return nil, err
	}
	c.seen, c.looked, c.loads = content.hash(), now(), 1
	return c, nil
}

// Config returns a TLS configuration for servers, by gRPC or HTTP: TLS 1.2 or later, and a verified client certificate.
func (c *Certificates) Config() *tls.Config {
	return &tls.Config{
		MinVersion: tls.VersionTLS12,
		// Stated here as well, so that whoever reads this configuration sees what holds; each handshake takes the one below.
		ClientAuth: tls.RequireAndVerifyClientCert,
		GetConfigForClient: func(*tls.ClientHelloInfo) (*tls.Config, error) {
			return c.latest(), nil
		},
	}
}

// Expiry returns when the certificate in use ends.
func (c *Certificates) Expiry() time.Time {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.expires
}

// Loads returns how often changed files were taken up or refused, and how often they were refused.
func (c *Certificates) Loads() (attempts, failures uint64) {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.loads, c.failures
}

// latest returns the configuration of the files as they stand, or the last good one.
func (c *Certificates) latest() *tls.Config {
	c.mu.Lock()
	defer c.mu.Unlock()
	now := c.now()
	// A clock that was set back must not stop the looking.
	if since := now.Sub(c.looked); since >= 0 && since < lookEvery {
		return c.current
	}
	c.looked = now
	content, err := c.files.read()
	if err == nil && content.hash() == c.seen {
		return c.current
	}
	if err == nil {
		c.seen = content.hash()
		var config *tls.Config
		var expires time.Time
		if config, expires, err = content.config(); err == nil {
			c.current, c.expires = config, expires
			c.loads++
			c.log.Info("certificates_loaded", slog.String("file", c.files.Certificate), slog.Time("not_after", expires))
			return c.current
		}
	}
	c.loads++
	c.failures++
	c.log.Error("certificates_refused", slog.Any("error", err), slog.Time("old_not_after", c.expires))
	return c.current
}

// pemFiles is what the files hold.
type pemFiles struct{ certificate, key, callerCAs []byte }

func (f CertificateFiles) read() (p pemFiles, err error) {
	for _, one := range []struct {
		what, file string
		into       *[]byte
	}{{"certificate", f.Certificate, &p.certificate}, {"key", f.Key, &p.key}, {"CA of the callers", f.CallerCAs, &p.callerCAs}} {
		if *one.into, err = os.ReadFile(one.file); err != nil {
			return p, fmt.Errorf("%s: %w", one.what, err)
		}
	}
	return p, nil
}

func (p pemFiles) hash() [sha256.Size]byte {
	return sha256.Sum256(slices.Concat(p.certificate, []byte{0}, p.key, []byte{0}, p.callerCAs))
}

// config makes the TLS configuration of what the files hold, and says when the certificate ends.
func (p pemFiles) config() (*tls.Config, time.Time, error) {
	pair, err := tls.X509KeyPair(p.certificate, p.key)
	if err != nil {
		return nil, time.Time{}, fmt.Errorf("certificate and key: %w", err)
	}
	leaf := pair.Leaf
	if !slices.Contains(leaf.ExtKeyUsage, x509.ExtKeyUsageServerAuth) && !slices.Contains(leaf.ExtKeyUsage, x509.ExtKeyUsageAny) && len(leaf.ExtKeyUsage) > 0 {
		return nil, time.Time{}, errors.New("certificate: want one for a server (extended key usage serverAuth), got one for other uses")
	}
	if len(leaf.DNSNames)+len(leaf.IPAddresses)+len(leaf.URIs) == 0 {
		return nil, time.Time{}, errors.New("certificate: want a subject alternative name, got none")
	}
	pool := x509.NewCertPool()
	if !pool.AppendCertsFromPEM(p.callerCAs) {
		return nil, time.Time{}, errors.New("CA of the callers: want at least one PEM certificate, got none")
	}
	return &tls.Config{
		MinVersion:   tls.VersionTLS12,
		Certificates: []tls.Certificate{pair},
		ClientAuth:   tls.RequireAndVerifyClientCert,
		ClientCAs:    pool,
		NextProtos:   []string{"h2", "http/1.1"},
		// A ticket would let a caller in on what was verified earlier, perhaps by a CA that has been taken out since.
		SessionTicketsDisabled: true,
	}, leaf.NotAfter, nil
}
