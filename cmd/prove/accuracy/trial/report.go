package trial

import (
	"fmt"
	"io"
	"strings"
	"text/tabwriter"
)

// Report prints tables and gathers what failed.
type Report struct {
	out      io.Writer
	failures []string
}

// NewReport returns a report that prints to out.
func NewReport(out io.Writer) *Report { return &Report{out: out} }

// Printf prints a line.
func (r *Report) Printf(format string, args ...any) { fmt.Fprintf(r.out, format+"\n", args...) }

// Fail notes and prints what is not as it must be.
func (r *Report) Fail(format string, args ...any) {
	s := fmt.Sprintf(format, args...)
	r.failures = append(r.failures, s)
	r.Printf("FAIL %s", s)
}

// Failures returns what failed so far.
func (r *Report) Failures() []string { return r.failures }

// Table is one table of a report, printed as a whole by its Close so that its columns stand under each other.
type Table struct {
	report *Report
	w      *tabwriter.Writer
}

// Table begins a table with a title and the heads of its columns.
func (r *Report) Table(title string, columns ...string) *Table {
	r.Printf("\n%s", title)
	t := &Table{report: r, w: tabwriter.NewWriter(r.out, 0, 0, 2, ' ', 0)}
	fmt.Fprintln(t.w, strings.Join(columns, "\t"))
	return t
}

// Row adds a row; cells are printed as they are, floats as %.3g.
func (t *Table) Row(cells ...any) {
	text := make([]string, len(cells))
	for i, c := range cells {
		switch v := c.(type) {
		case float64:
			text[i] = fmt.Sprintf("%.3g", v)
		default:
			text[i] = fmt.Sprint(c)
		}
	}
	fmt.Fprintln(t.w, strings.Join(text, "\t"))
}

// Close prints the table.
func (t *Table) Close() { t.w.Flush() }
