package document

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
)

// Fault is one thing that is wrong with a file.
type Fault struct {
	File  string
	Line  int    // from 1; 0 when the fault has no line
	Field string // path of the key, as in limits.motional_resistance.max or sweeps[2].file; may be empty
	Text  string // what was expected and what was given
}

// Error returns file:line: field: text, without what is not known.
func (f Fault) Error() string {
	var b strings.Builder
	b.WriteString(f.File)
	if f.Line > 0 {
		fmt.Fprintf(&b, ":%d", f.Line)
	}
	b.WriteString(": ")
	if f.Field != "" {
		b.WriteString(f.Field + ": ")
	}
	b.WriteString(f.Text)
	return b.String()
}

// Faults is every fault of one or several files, as one error.
type Faults []Fault

// Error returns the faults, one a line.
func (f Faults) Error() string {
	lines := make([]string, len(f))
	for i, fault := range f {
		lines[i] = fault.Error()
	}
	return strings.Join(lines, "\n")
}

// sortByLine brings the faults of one file into the order in which a person meets them; those found while looking for missing keys
// come last otherwise.
func (f Faults) sortByLine() {
	slices.SortStableFunc(f, func(a, b Fault) int { return cmp.Compare(a.Line, b.Line) })
}

// excerpt shows a piece of a file in a message: quoted, and cut, because it may be of any length.
func excerpt(text string) string {
	const shown = 48
	if len(text) <= shown {
		return fmt.Sprintf("%q", text)
	}
	return fmt.Sprintf("%q...", strings.ToValidUTF8(text[:shown], ""))
}
