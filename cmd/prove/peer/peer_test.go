package peer

import (
	"strings"
	"testing"
)

// TestPeersListed names every missing outside program with the package that brings it, and counts them. Run it with -v to see the list.
func TestPeersListed(t *testing.T) {
	var missing []string
	for _, p := range All() {
		if p.Package == "" {
			t.Errorf("%s names no package that brings it", p.Name)
		}
		if p.Find() == "" {
			missing = append(missing, p.Name+" ("+p.Package+")")
		}
	}
	t.Logf("%d of %d outside programs are missing: %s", len(missing), len(All()), strings.Join(missing, ", "))
	if len(missing) > 0 && Required() {
		t.Errorf("ADMIT_REQUIRE_PEERS=1, but %d are missing: %s", len(missing), strings.Join(missing, ", "))
	}
}

func TestMissingProgramIsNotFound(t *testing.T) {
	gone := Program{Name: "gone", Command: "no-such-program-anywhere", Package: "Debian package gone"}
	if got := gone.Find(); got != "" {
		t.Errorf("Find() = %q, want nothing", got)
	}
}
