package main

import (
	"bytes"
	"encoding/json"
	"io"
	"runtime/debug"

	"github.com/spf13/cobra"
	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/proto"
)

// streams are the standard streams of a command.
type streams struct {
	in       io.Reader
	out, err io.Writer
}

// version is the version of the wire contract and of the store that this program serves.
const version = "1"

// revision names this build: the version control revision that Go stamped, or "unstamped".
func revision() string {
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return "unstamped"
	}
	text, modified := "", ""
	for _, s := range info.Settings {
		switch {
		case s.Key == "vcs.revision":
			text = s.Value[:min(12, len(s.Value))]
		case s.Key == "vcs.modified" && s.Value == "true":
			modified = "+changes"
		}
	}
	if text == "" {
		return "unstamped"
	}
	return text + modified
}

// printJSON writes a message in its JSON form: fields by their JSON names, zero values written out. The spacing of protojson differs from
// build to build on purpose; ours does not.
func printJSON(c *cobra.Command, m proto.Message) error {
	compact, err := protojson.MarshalOptions{EmitDefaultValues: true}.Marshal(m)
	if err != nil {
		return err
	}
	var text bytes.Buffer
	if err := json.Indent(&text, compact, "", "  "); err != nil {
		return err
	}
	text.WriteByte('\n')
	_, err = c.OutOrStdout().Write(text.Bytes())
	return err
}
