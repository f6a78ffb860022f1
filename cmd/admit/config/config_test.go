package config

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// TestGood: every example of a good configuration is taken.
func TestGood(t *testing.T) {
	files, _ := filepath.Glob("testdata/good/*.yaml")
	if len(files) == 0 {
		t.Fatal("no examples")
	}
	for _, f := range files {
		if _, err := Load(f, nil, nil); err != nil {
			t.Errorf("%v", err)
		}
	}
}

// TestBad: every bad one is refused with every message that its first lines ask for, all at once.
func TestBad(t *testing.T) {
	files, _ := filepath.Glob("testdata/bad/*.yaml")
	if len(files) == 0 {
		t.Fatal("no examples")
	}
	for _, f := range files {
		source, err := os.ReadFile(f)
		if err != nil {
			t.Fatal(err)
		}
		_, err = Load(f, nil, nil)
		if err == nil {
			t.Errorf("%s: taken", f)
			continue
		}
		wants := 0
		for _, line := range strings.Split(string(source), "\n") {
			if want, ok := strings.CutPrefix(line, "# wants: "); ok {
				wants++
				if !strings.Contains(err.Error(), want) {
					t.Errorf("%s: %q is missing in:\n%v", f, want, err)
				}
			}
		}
		if wants == 0 {
			t.Errorf("%s states no message", f)
		}
	}
}

// TestOrder: the environment overrides the file, and an unknown variable of ours is an error.
func TestOrder(t *testing.T) {
	c, err := Load("testdata/good/plant.yaml", []string{"ADMIT_STORE=/elsewhere", "HOME=/root", "ADMIT_REQUIRE_PEERS=1"}, nil)
	if err != nil || c.Store != "/elsewhere" || c.Listen != "0.0.0.0:7340" {
		t.Errorf("store %q, listen %q, %v", c.Store, c.Listen, err)
	}
	c, err = Load("testdata/bad/open-without-tls.yaml", nil, func(c *Config) { c.Listen, c.HTTP = "127.0.0.1:1", "127.0.0.1:2" })
	if err != nil || c.Listen != "127.0.0.1:1" {
		t.Errorf("a flag does not override a bad value of the file: %v", err)
	}
	if _, err := Load("", []string{"ADMIT_STOER=/x"}, nil); err == nil || !strings.Contains(err.Error(), "ADMIT_STOER") {
		t.Errorf("a misspelt variable: %v", err)
	}
}
