package main

import (
	"encoding/json"
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"os/exec"
	"path"
	"path/filepath"
	"strings"
	"testing"
)

const module = "example.com/admit"

// core are the packages that know physics, limits and the use case: no wire, no store, no network, no clock, no file.
var core = []string{
	"service/crystal", "service/sweep", "service/network", "service/leastsquares", "service/uncertainty", "service/resonance",
	"service/survey", "service/parttype", "service/verdict", "service/plan", "service/inspection",
}

// rule says that no package of a set may reach (directly or through others) any package of another set, and why. A name ends in /... for
// everything below it.
type rule struct {
	from   []string
	forbid []string
	why    string
}

// rules are the arrows of the house. Whoever adds a package looks here first.
var rules = []rule{
	{[]string{"service/crystal"}, []string{module + "/...", "google.golang.org/...", "go.etcd.io/...", "github.com/..."}, "crystal is the ground: the standard library only"},
	{[]string{"service/leastsquares", "service/uncertainty"}, []string{module + "/..."}, "the solver and the arithmetic of uncertainty know no crystal"},
	{[]string{"service/sweep"}, []string{module + "/service/network", module + "/service/resonance"}, "samples do not know what is made of them"},
	{[]string{"service/network"}, []string{module + "/service/resonance", module + "/service/verdict"}, "the network fits and judges nothing"},
	{[]string{"service/resonance"}, []string{module + "/service/verdict", module + "/service/parttype", module + "/service/inspection"}, "the fit must not know what would be liked"},
	{[]string{"service/verdict", "service/parttype"}, []string{module + "/service/resonance", module + "/service/inspection"}, "limits are held against readings, wherever these come from"},
	{core, []string{
		module + "/api/...", module + "/service/wire", module + "/service/rpc", module + "/service/web", module + "/service/metrics",
		"google.golang.org/grpc/...", "google.golang.org/protobuf/...", "go.etcd.io/bbolt/...", "github.com/prometheus/...", "net/http/...", "log/slog",
	}, "the core knows neither wire nor store nor screen, and logs nothing"},
	{[]string{"service/web", "service/metrics", "service/floor"}, []string{module + "/service/rpc"}, "one edge does not know another; what they share is the domain's"},
	{[]string{"service/..."}, []string{module + "/fixtures/...", module + "/storage/...", module + "/cmd/..."}, "service declares ports; fixtures and storage are handed in by cmd"},
	{[]string{"fixtures/simulated"}, []string{module + "/service/resonance", module + "/service/survey"}, "a program must not check itself"},
	{[]string{"cmd/prove/bound"}, []string{
		module + "/service/sweep", module + "/service/network", module + "/service/leastsquares", module + "/service/uncertainty", module + "/service/resonance",
		module + "/service/survey", module + "/fixtures/...",
	}, "the bound shares nothing with the fit that is held against it"},
	{[]string{"storage/volume/...", "storage/catalogue"}, []string{module + "/service/...", module + "/api/..."}, "a volume keeps opaque records"},
	{[]string{"storage/..."}, []string{module + "/fixtures/...", module + "/service/rpc", module + "/service/web"}, "the store serves nobody by itself"},
}

// TestArrows holds the rules against the real import graph, and demands that every name in them exists.
func TestArrows(t *testing.T) {
	graph := imports(t)
	for _, v := range violations(graph, rules) {
		t.Error(v)
	}
	for _, r := range rules {
		for _, pattern := range append(append([]string(nil), prefixed(r.from)...), r.forbid...) {
			if later[strings.TrimPrefix(pattern, module+"/")] {
				continue
			}
			found := false
			for name := range graph {
				found = found || matches(pattern, name)
			}
			if !found {
				t.Errorf("rule %q names %s, which no longer exists", r.why, pattern)
			}
		}
	}
}

// later names packages that the rules foresee and that do not exist yet.
var later = map[string]bool{}

// TestArrowsGoRed proves that a forbidden import is found, direct or through another package.
func TestArrowsGoRed(t *testing.T) {
	graph := map[string][]string{
		module + "/service/resonance":  {module + "/service/network", module + "/service/helper"},
		module + "/service/helper":     {"net/http"},
		module + "/service/network":    {},
		module + "/fixtures/simulated": {module + "/service/resonance"},
		"net/http":                     {},
	}
	got := strings.Join(violations(graph, rules), "\n")
	for _, want := range []string{"service/resonance reaches net/http", "fixtures/simulated reaches example.com/admit/service/resonance"} {
		if !strings.Contains(got, want) {
			t.Errorf("%q not found in:\n%s", want, got)
		}
	}
}

// TestCoreReadsNoClockAndNoFile looks through the sources of the core for the calls that do.
func TestCoreReadsNoClockAndNoFile(t *testing.T) {
	forbidden := map[string]map[string]bool{
		"time": {"Now": true, "Since": true, "Until": true, "Sleep": true, "After": true, "Tick": true, "NewTimer": true, "NewTicker": true},
		"os":   nil, // all of it
	}
	for _, dir := range core {
		files, err := filepath.Glob(filepath.Join("..", "..", dir, "*.go"))
		if err != nil || len(files) == 0 {
			t.Errorf("%s: no sources (%v)", dir, err)
		}
		for _, file := range files {
			if strings.HasSuffix(file, "_test.go") {
				continue
			}
			tree, err := parser.ParseFile(token.NewFileSet(), file, nil, 0)
			if err != nil {
				t.Fatal(err)
			}
			for _, call := range calls(tree, forbidden) {
				t.Errorf("%s uses %s: the core is given its clock and its files", file, call)
			}
		}
	}
}

// TestTopLevel: the repository's first level is fixed.
func TestTopLevel(t *testing.T) {
	allowed := map[string]bool{}
	for _, n := range strings.Fields("api cmd service fixtures storage deploy testdata go.mod go.sum README.md DEVELOPERS.md") {
		allowed[n] = true
	}
	out, err := exec.Command("git", "-C", "../..", "ls-tree", "--name-only", "HEAD").Output()
	if err != nil {
		t.Skip("skipped: not a git checkout, or git is missing (Debian package git)")
	}
	for _, n := range strings.Fields(string(out)) {
		if !allowed[n] && !strings.HasPrefix(n, ".") {
			t.Errorf("top level holds %s", n)
		}
	}
}

// imports returns the import graph of the module with everything it reaches, test files left out.
func imports(t *testing.T) map[string][]string {
	t.Helper()
	cmd := exec.Command("go", "list", "-deps", "-json=ImportPath,Imports", module+"/...")
	cmd.Dir = filepath.Join("..", "..")
	out, err := cmd.Output()
	if err != nil {
		t.Fatalf("go list: %v", err)
	}
	graph := map[string][]string{}
	for d := json.NewDecoder(strings.NewReader(string(out))); d.More(); {
		var p struct {
			ImportPath string
			Imports    []string
		}
		if err := d.Decode(&p); err != nil {
			t.Fatal(err)
		}
		graph[p.ImportPath] = p.Imports
	}
	return graph
}

// violations returns a sentence for each package that reaches what it must not, with the way there.
func violations(graph map[string][]string, rules []rule) []string {
	var out []string
	for _, r := range rules {
		for name := range graph {
			if !anyMatches(prefixed(r.from), name) {
				continue
			}
			for reached, way := range reach(graph, name) {
				if reached != name && anyMatches(r.forbid, reached) && !anyMatches(prefixed(r.from), reached) {
					out = append(out, fmt.Sprintf("%s reaches %s (%s): %s", name, reached, way, r.why))
				}
			}
		}
	}
	return out
}

// reach returns every package reachable from one, with the way there.
func reach(graph map[string][]string, from string) map[string]string {
	ways := map[string]string{from: path.Base(from)}
	for queue := []string{from}; len(queue) > 0; queue = queue[1:] {
		for _, next := range graph[queue[0]] {
			if _, seen := ways[next]; !seen {
				ways[next] = ways[queue[0]] + " > " + path.Base(next)
				queue = append(queue, next)
			}
		}
	}
	return ways
}

func prefixed(names []string) []string {
	out := make([]string, len(names))
	for i, n := range names {
		out[i] = module + "/" + n
	}
	return out
}

func anyMatches(patterns []string, name string) bool {
	for _, p := range patterns {
		if matches(p, name) {
			return true
		}
	}
	return false
}

// matches holds a name against a pattern that may end in /... .
func matches(pattern, name string) bool {
	if below, ok := strings.CutSuffix(pattern, "/..."); ok {
		return name == below || strings.HasPrefix(name, below+"/")
	}
	return name == pattern
}

// calls returns the selectors of forbidden packages that a file uses; a nil set forbids the whole package.
func calls(tree *ast.File, forbidden map[string]map[string]bool) []string {
	var out []string
	ast.Inspect(tree, func(n ast.Node) bool {
		s, ok := n.(*ast.SelectorExpr)
		if !ok {
			return true
		}
		if x, ok := s.X.(*ast.Ident); ok && x.Obj == nil {
			if set, known := forbidden[x.Name]; known && (set == nil || set[s.Sel.Name]) {
				out = append(out, x.Name+"."+s.Sel.Name)
			}
		}
		return true
	})
	return out
}
