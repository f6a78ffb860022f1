package main

import (
	"crypto/tls"
	"crypto/x509"
	"fmt"
	"net"
	"os"

	"github.com/spf13/cobra"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"

	"example.com/admit/cmd/admit/config"
	"example.com/admit/fixtures/station"
)

// access are the flags with which a command finds a server.
type access struct {
	address                             string
	certificate, key, serverAuthorities string
}

// flags adds them to a command.
func (a *access) flags(c *cobra.Command) {
	c.Flags().StringVar(&a.address, "server", config.Default().Listen, "address of the server (gRPC)")
	c.Flags().StringVar(&a.certificate, "certificate", "", "file of the client certificate (PEM); without it the address must be loopback")
	c.Flags().StringVar(&a.key, "key", "", "file of its private key (PEM)")
	c.Flags().StringVar(&a.serverAuthorities, "authorities", "", "file of the authorities that may sign the server's certificate (PEM)")
}

// dial prepares a connection.
func (a *access) dial() (*station.Client, error) {
	if a.certificate == "" && a.key == "" && a.serverAuthorities == "" {
		if host, _, err := net.SplitHostPort(a.address); err != nil || !config.Loopback(host) {
			return nil, badInput{fmt.Errorf("--server %s: want a loopback host:port, or --certificate, --key and --authorities for TLS", a.address)}
		}
		return station.Dial(a.address, nil)
	}
	if a.certificate == "" || a.key == "" || a.serverAuthorities == "" {
		return nil, badInput{fmt.Errorf("--certificate, --key and --authorities go together")}
	}
	pair, err := tls.LoadX509KeyPair(a.certificate, a.key)
	if err != nil {
		return nil, badInput{fmt.Errorf("client certificate: %w", err)}
	}
	pem, err := os.ReadFile(a.serverAuthorities)
	if err != nil {
		return nil, badInput{err}
	}
	pool := x509.NewCertPool()
	if !pool.AppendCertsFromPEM(pem) {
		return nil, badInput{fmt.Errorf("%s: no certificate in it", a.serverAuthorities)}
	}
	return station.Dial(a.address, &tls.Config{Certificates: []tls.Certificate{pair}, RootCAs: pool, MinVersion: tls.VersionTLS12})
}

// answered turns a server's refusal of what was sent into bad input; anything else is trouble.
func answered(err error) error {
	switch status.Code(err) {
	case codes.InvalidArgument, codes.FailedPrecondition, codes.AlreadyExists, codes.NotFound, codes.PermissionDenied:
		return badInput{fmt.Errorf("the server refuses: %s", status.Convert(err).Message())}
	}
	if status.Code(err) == codes.Unavailable {
		return fmt.Errorf("no answer from the server (is it running, and does it ask for TLS?): %s", status.Convert(err).Message())
	}
	return err
}
