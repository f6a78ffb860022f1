// Package peer finds what tests check Admit against from outside: other programs (a circuit simulator, scipy, a browser, Prometheus'
// own tools) and the folder of shared papers and measured sweeps that lies beside a developer's checkout.
//
// A missing program skips the test that needs it and names the package that brings it; with ADMIT_REQUIRE_PEERS=1, as the
// continuous integration sets it, the same test fails. The shared folder is never required: a user's machine has none.
package peer

import (
	"os"
	"os/exec"
	"path/filepath"
	"testing"
)

// Program is an outside program that some test runs.
type Program struct {
	Name    string   // what a person calls it
	Command string   // the executable, looked up on PATH
	Also    []string // further places where the package puts it
	Probe   []string // arguments that exit 0 when the program is usable; nil: being there is enough
	Package string   // what brings it, "Debian package X" or "npm package X"
}

// The outside programs in use. Debian's own python3 is asked for by its full path, because another python3 without scipy may come
// first on PATH.
var (
	Ngspice    = Program{Name: "ngspice", Command: "ngspice", Package: "Debian package ngspice"}
	Scipy      = Program{Name: "scipy", Command: "/usr/bin/python3", Probe: []string{"-c", "import scipy"}, Package: "Debian package python3-scipy"}
	Prometheus = Program{Name: "prometheus", Command: "prometheus", Package: "Debian package prometheus"}
	Promtool   = Program{Name: "promtool", Command: "promtool", Package: "Debian package prometheus"}
	Chromium   = Program{Name: "chromium", Command: "chromium", Package: "Debian package chromium"}
	Buf        = Program{Name: "buf", Command: "buf", Also: []string{".ci/node_modules/.bin/buf"}, Package: "npm package @bufbuild/buf"}
	Playwright = Program{Name: "playwright-core", Command: "playwright-core", Also: []string{".ci/node_modules/.bin/playwright-core"}, Package: "npm package playwright-core"}
)

// All lists every program above.
func All() []Program {
	return []Program{Ngspice, Scipy, Prometheus, Promtool, Chromium, Buf, Playwright}
}

// Find returns the path of a usable executable, or "" when the program is missing.
func (p Program) Find() string {
	path, err := exec.LookPath(p.Command)
	for i := 0; err != nil && i < len(p.Also); i++ {
		path, err = exec.LookPath(filepath.Join(root(), p.Also[i]))
	}
	if err != nil {
		return ""
	}
	if p.Probe != nil && exec.Command(path, p.Probe...).Run() != nil {
		return ""
	}
	return path
}

// Required reports whether a missing program is a failure here.
func Required() bool { return os.Getenv("ADMIT_REQUIRE_PEERS") == "1" }

// Need returns the path of the program, or ends the test: skipped where peers are optional, failed where they are required.
func Need(t testing.TB, p Program) string {
	t.Helper()
	path := p.Find()
	if path != "" {
		return path
	}
	if Required() {
		t.Fatalf("%s is missing; it comes with the %s", p.Name, p.Package)
	}
	t.Skipf("skipped: needs %s, which comes with the %s", p.Name, p.Package)
	return ""
}

// Shared returns the path of a file or folder in the shared papers beside the checkout, or skips the test when they are not there.
func Shared(t testing.TB, elem ...string) string {
	t.Helper()
	path := filepath.Join(append([]string{root(), "..", "shared"}, elem...)...)
	if _, err := os.Stat(path); err != nil {
		t.Skipf("skipped: the shared folder with %s is not beside this checkout", filepath.Join(elem...))
	}
	return path
}

// Testdata returns the path of a file below the project's own testdata folder.
func Testdata(elem ...string) string {
	return filepath.Join(append([]string{root(), "testdata"}, elem...)...)
}

// root walks up from the working directory to the folder that holds go.mod.
func root() string {
	dir, err := os.Getwd()
	if err != nil {
		return "."
	}
	for d := dir; ; d = filepath.Dir(d) {
		if _, err := os.Stat(filepath.Join(d, "go.mod")); err == nil {
			return d
		}
		if d == filepath.Dir(d) {
			return dir
		}
	}
}
