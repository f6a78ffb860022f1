// Package config is the configuration of the server: one struct with documented defaults, read strictly from a file, overridden by
// environment variables (ADMIT_...) and those by flags. Unknown keys are errors, every value is checked at start, and all faults are
// listed at once.
package config

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"net"
	"os"
	"slices"
	"strings"
	"time"

	"go.yaml.in/yaml/v3"

	"example.com/admit/service/network"
)

// Config is the server's configuration. The yaml keys are the reference; README.md explains them to the person who installs it.
type Config struct {
	// Store is the folder of the store. It must lie on a local disk.
	Store string `yaml:"store"`
	// Listen is the address for stations (gRPC).
	Listen string `yaml:"listen"`
	// HTTP is the address for people and for Prometheus: pages, the JSON mapping, /metrics.
	HTTP string `yaml:"http"`
	// TLS names the files of the server's certificate. Required on any address but loopback.
	TLS TLS `yaml:"tls"`
	// Callers says who may do what, by the name in the client's certificate.
	Callers []Caller `yaml:"callers"`
	// LoopbackPermissions is what a caller without TLS on a loopback address may do. Absent: everything.
	LoopbackPermissions []string `yaml:"loopback_permissions"`
	// Stations are the test positions. Empty: any name is accepted.
	Stations []Station `yaml:"stations"`
	// Volume says when a volume of the store is closed and the next one begun.
	Volume Volume `yaml:"volume"`
	// Log says what is logged.
	Log Log `yaml:"log"`
}

// TLS names files; they are read again when they change.
type TLS struct {
	Certificate       string `yaml:"certificate"`
	Key               string `yaml:"key"`
	ClientAuthorities string `yaml:"client_authorities"`
}

// Caller is one name in a client certificate's subject alternative names, with what it may do and which stations it may speak for.
type Caller struct {
	Name       string   `yaml:"name"`
	Permission string   `yaml:"permission"`
	Stations   []string `yaml:"stations"`
}

// Station is one test position.
type Station struct {
	Station        string       `yaml:"station"`
	Line           string       `yaml:"line"`
	FixtureNetwork network.Kind `yaml:"fixture_network"`
	ContactHeads   []string     `yaml:"contact_heads"`
}

// Volume bounds one volume of the store.
type Volume struct {
	MaximumMegabytes int           `yaml:"maximum_megabytes"`
	MaximumAge       time.Duration `yaml:"maximum_age"`
}

// Log says what is logged and how.
type Log struct {
	Level  string `yaml:"level"`  // debug, info, warn, error
	Format string `yaml:"format"` // text, json
}

// Default returns the configuration that holds where nothing else is said.
func Default() Config {
	return Config{
		Store:  "admit-store",
		Listen: "127.0.0.1:7340",
		HTTP:   "127.0.0.1:7341",
		Volume: Volume{MaximumMegabytes: 1024, MaximumAge: 24 * time.Hour},
		Log:    Log{Level: "info", Format: "text"},
	}
}

// Permissions that a caller can be given, in the order of what they may do.
var permissions = []string{"fixture", "operator", "supervisor", "engineer", "administrator", "metrics"}

// Parse reads a configuration file over the defaults. Name stands in messages.
func Parse(name string, source []byte) (Config, error) {
	c := Default()
	d := yaml.NewDecoder(bytes.NewReader(source))
	d.KnownFields(true)
	if err := d.Decode(&c); err != nil && !errors.Is(err, io.EOF) {
		return c, fmt.Errorf("%s: %w", name, err)
	}
	if err := c.Check(); err != nil {
		return c, fmt.Errorf("%s: %w", name, err)
	}
	return c, nil
}

// Load reads a file if a path is given, then the environment.
func Load(path string, environ []string) (Config, error) {
	c := Default()
	if path != "" {
		source, err := os.ReadFile(path)
		if err != nil {
			return c, err
		}
		if c, err = Parse(path, source); err != nil {
			return c, err
		}
	}
	if err := c.environment(environ); err != nil {
		return c, err
	}
	return c, c.Check()
}

// environment applies ADMIT_STORE, ADMIT_LISTEN, ADMIT_HTTP and ADMIT_LOG_LEVEL. An unknown ADMIT_ variable is an error: a misspelt one
// would otherwise be silently without effect. ADMIT_REQUIRE_PEERS belongs to the tests.
func (c *Config) environment(environ []string) error {
	known := map[string]*string{"ADMIT_STORE": &c.Store, "ADMIT_LISTEN": &c.Listen, "ADMIT_HTTP": &c.HTTP, "ADMIT_LOG_LEVEL": &c.Log.Level}
	var faults []error
	for _, e := range environ {
		key, value, _ := strings.Cut(e, "=")
		if !strings.HasPrefix(key, "ADMIT_") || key == "ADMIT_REQUIRE_PEERS" {
			continue
		}
		target, ok := known[key]
		if !ok {
			faults = append(faults, fmt.Errorf("environment variable %s is not known", key))
			continue
		}
		*target = value
	}
	return errors.Join(faults...)
}

// Check returns every fault of the configuration, joined, each naming its key.
func (c *Config) Check() error {
	var faults []error
	add := func(key, want string, got any) {
		faults = append(faults, fmt.Errorf("%s: want %s, got %v", key, want, got))
	}
	if c.Store == "" {
		add("store", "a folder", `""`)
	}
	for _, a := range []struct{ key, address string }{{"listen", c.Listen}, {"http", c.HTTP}} {
		host, _, err := net.SplitHostPort(a.address)
		if err != nil {
			add(a.key, "host:port", fmt.Sprintf("%q", a.address))
			continue
		}
		if !c.TLS.given() && !loopback(host) {
			add(a.key, "a loopback address where no tls is given", fmt.Sprintf("%q", a.address))
		}
	}
	if t := c.TLS; t != (TLS{}) && (t.Certificate == "" || t.Key == "" || t.ClientAuthorities == "") {
		add("tls", "certificate, key and client_authorities together", fmt.Sprintf("%+v", t))
	}
	heads := map[string]string{}
	names := map[string]bool{}
	for i, s := range c.Stations {
		key := fmt.Sprintf("stations[%d]", i)
		if s.Station == "" || names[s.Station] {
			add(key+".station", "a name of its own", fmt.Sprintf("%q", s.Station))
		}
		names[s.Station] = true
		if !slices.Contains(network.Kinds(), s.FixtureNetwork) {
			add(key+".fixture_network", fmt.Sprintf("one of %v", network.Kinds()), fmt.Sprintf("%q", s.FixtureNetwork))
		}
		if len(s.ContactHeads) == 0 {
			add(key+".contact_heads", "at least one", "none")
		}
		for _, h := range s.ContactHeads {
			if other, ok := heads[h]; ok {
				add(key+".contact_heads", "heads that no other station has", fmt.Sprintf("%q, also at %s", h, other))
			}
			heads[h] = s.Station
		}
	}
	callers := map[string]bool{}
	for i, k := range c.Callers {
		key := fmt.Sprintf("callers[%d]", i)
		if k.Name == "" || callers[k.Name] || strings.Contains(k.Name, "*") {
			add(key+".name", "a name of its own without a wildcard", fmt.Sprintf("%q", k.Name))
		}
		callers[k.Name] = true
		if !slices.Contains(permissions, k.Permission) {
			add(key+".permission", fmt.Sprintf("one of %v", permissions), fmt.Sprintf("%q", k.Permission))
		}
		for _, s := range k.Stations {
			if len(c.Stations) > 0 && !names[s] {
				add(key+".stations", "stations of this configuration", fmt.Sprintf("%q", s))
			}
		}
	}
	for _, p := range c.LoopbackPermissions {
		if !slices.Contains(permissions, p) {
			add("loopback_permissions", fmt.Sprintf("some of %v", permissions), fmt.Sprintf("%q", p))
		}
	}
	if v := c.Volume.MaximumMegabytes; v < 16 || v > 1<<20 {
		add("volume.maximum_megabytes", "16 to 1048576", v)
	}
	if a := c.Volume.MaximumAge; a < time.Minute || a > 31*24*time.Hour {
		add("volume.maximum_age", "1m to 744h", a)
	}
	if !slices.Contains([]string{"debug", "info", "warn", "error"}, c.Log.Level) {
		add("log.level", "debug, info, warn or error", fmt.Sprintf("%q", c.Log.Level))
	}
	if !slices.Contains([]string{"text", "json"}, c.Log.Format) {
		add("log.format", "text or json", fmt.Sprintf("%q", c.Log.Format))
	}
	return errors.Join(faults...)
}

func (t TLS) given() bool { return t.Certificate != "" && t.Key != "" && t.ClientAuthorities != "" }

// loopback reports whether a host is a loopback address by its form; a name other than localhost is not trusted to be one.
func loopback(host string) bool {
	if host == "localhost" {
		return true
	}
	ip := net.ParseIP(host)
	return ip != nil && ip.IsLoopback()
}
