package main

import (
	"io"
	"strings"
	"testing"
)

func TestCommandLine(t *testing.T) {
	for _, c := range []struct {
		args  string
		fault string // part of the error; "" for none
	}{
		{"", ""}, {"--help", ""}, {"accuracy --help", ""}, {"fit --help", ""},
		{"nonsense", "unknown command"}, {"fit nonsense", "unknown command"}, {"accuracy --trials many", "invalid argument"},
	} {
		command := command()
		command.SetArgs(strings.Fields(c.args))
		command.SetOut(io.Discard)
		err := command.ExecuteContext(t.Context())
		if (err == nil) != (c.fault == "") || err != nil && !strings.Contains(err.Error(), c.fault) {
			t.Errorf("prove %s: %v, want an error with %q", c.args, err, c.fault)
		}
	}
}
