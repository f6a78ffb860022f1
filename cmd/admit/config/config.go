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
	"strconv"
	"strings"
	"time"

	"go.yaml.in/yaml/v3"

	"example.com/admit/service/network"
	"example.com/admit/service/rpc"
)

// Config is the server's configuration. The yaml keys are the reference; testdata/good/plant.yaml is a whole example.
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
	Name        string   `yaml:"name"`
	Permissions []string `yaml:"permissions"`
	Stations    []string `yaml:"stations"`
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

// permissions that a caller can be given; the server's table of methods (service/rpc) says what each of them opens.
var permissions = names(rpc.Permissions())

func names(all []rpc.Permission) []string {
	out := make([]string, len(all))
	for i, p := range all {
		out[i] = string(p)
	}
	return out
}

// Load reads a file if a path is given, then the environment, then applies override (flags; may be nil), and checks the whole. Every fault
// of all of these comes back at once.
func Load(path string, environ []string, override func(*Config)) (Config, error) {
	c := Default()
	var faults []error
	if path != "" {
		source, err := os.ReadFile(path)
		if err != nil {
			return c, err
		}
		if err := c.decode(path, source); err != nil {
			faults = append(faults, err)
		}
	}
	if err := c.environment(environ); err != nil {
		faults = append(faults, err)
	}
	if override != nil {
		override(&c)
	}
	if err := c.Check(); err != nil {
		faults = append(faults, err)
	}
	return c, errors.Join(faults...)
}

// decode reads a configuration file over what is there. What is good of it is taken even when something is not.
func (c *Config) decode(name string, source []byte) error {
	d := yaml.NewDecoder(bytes.NewReader(source))
	d.KnownFields(true)
	err := d.Decode(c)
	var list *yaml.TypeError
	switch {
	case errors.Is(err, io.EOF): // an empty file: everything at its default
		return nil
	case errors.As(err, &list):
		var faults []error
		for _, text := range list.Errors {
			faults = append(faults, fmt.Errorf("%s: %s", name, inWords(text)))
		}
		return errors.Join(faults...)
	case err != nil:
		return fmt.Errorf("%s: %w", name, err)
	}
	if d.Decode(new(yaml.Node)) != io.EOF {
		return fmt.Errorf("%s: want one YAML document, got another behind it", name)
	}
	return nil
}

// inWords takes the names of our types out of the library's message about an unknown key.
func inWords(text string) string {
	before, _, found := strings.Cut(text, " not found in type ")
	if !found {
		return text
	}
	return strings.Replace(before, "field ", "key ", 1) + " is not known"
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
		host, port, err := net.SplitHostPort(a.address)
		if n, bad := strconv.ParseUint(port, 10, 16); err != nil || bad != nil {
			add(a.key, "host:port with a port from 0 to 65535", fmt.Sprintf("%q", a.address))
			continue
		} else if n != 0 && a.key == "http" && a.address == c.Listen {
			add(a.key, "another address than listen", fmt.Sprintf("%q", a.address))
		}
		if !c.TLS.given() && !Loopback(host) {
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
		if len(k.Permissions) == 0 {
			add(key+".permissions", fmt.Sprintf("some of %v", permissions), "none")
		}
		for _, p := range k.Permissions {
			if !slices.Contains(permissions, p) {
				add(key+".permissions", fmt.Sprintf("some of %v", permissions), fmt.Sprintf("%q", p))
			}
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

// Loopback reports whether a host is a loopback address by its form; a name other than localhost is not trusted to be one.
func Loopback(host string) bool {
	if host == "localhost" {
		return true
	}
	ip := net.ParseIP(host)
	return ip != nil && ip.IsLoopback()
}
