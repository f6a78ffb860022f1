package inspection

import (
	"errors"
	"fmt"
)

// Kind classes what went wrong, so that every edge (gRPC, HTTP, command line) can turn it into its own words in one place. The numbers
// are stable and never reordered.
type Kind int

// The kinds.
const (
	Broken      Kind = iota // a broken invariant of ours
	Malformed               // bad input: field, limit, and what was sent; sending it again as it is does not help
	Unknown                 // a part type, calibration, station or inspection that does not exist
	Conflict                // the same identity with other content
	Forbidden               // the caller may not do this
	Busy                    // try again after a pause: too much at once, or the disk is full
	Unavailable             // stopping, or the storage has failed
)

// String names the kind.
func (k Kind) String() string {
	return [...]string{"internal fault", "malformed", "unknown", "conflict", "forbidden", "busy", "unavailable"}[k]
}

// Fault is an error with its kind and the thing it happened to.
type Fault struct {
	Kind  Kind
	Field string // the field or the name of the thing; may be empty
	Err   error
}

func (f *Fault) Error() string {
	if f.Field == "" {
		return f.Err.Error()
	}
	return f.Field + ": " + f.Err.Error()
}

// Unwrap returns the cause.
func (f *Fault) Unwrap() error { return f.Err }

// Faultf returns a Fault whose cause is the formatted text (with %w for an error underneath).
func Faultf(kind Kind, field, format string, args ...any) error {
	return &Fault{Kind: kind, Field: field, Err: fmt.Errorf(format, args...)}
}

// KindOf returns the kind of the outermost Fault in err's chain; an error without one is a broken invariant.
func KindOf(err error) Kind {
	var f *Fault
	if errors.As(err, &f) {
		return f.Kind
	}
	return Broken
}
