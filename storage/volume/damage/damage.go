// Package damage names stored data that was found broken, and where. Every reader of the store reports through it, so that a
// person learns which volume, file, bucket and key (or page) is concerned, and a caller can tell damage from absence with errors.Is.
package damage

import (
	"errors"
	"fmt"
	"strings"
)

// ErrDamaged is matched by every *Error. Damaged data is never served, and the file that holds it is never changed or deleted.
var ErrDamaged = errors.New("stored data is damaged")

// Error is one place that was found broken. Fields that do not apply keep their zero value; a page is counted from 0 and is
// meaningful only with HasPage.
type Error struct {
	Volume  uint64 // number of the volume, 0 outside a volume
	File    string // path of the file
	Bucket  string // bucket of the key
	Key     []byte // key whose value failed
	Page    uint64 // page of 4096 bytes
	HasPage bool
	Problem string // what is wrong, in words
	Cause   error  // what was met underneath, if anything
}

// Error says everything that is known, outermost first.
func (e *Error) Error() string {
	var b strings.Builder
	if e.Volume != 0 {
		fmt.Fprintf(&b, "volume %d: ", e.Volume)
	}
	if e.File != "" {
		fmt.Fprintf(&b, "%s: ", e.File)
	}
	if e.HasPage {
		fmt.Fprintf(&b, "page %d: ", e.Page)
	}
	if e.Bucket != "" {
		fmt.Fprintf(&b, "bucket %s: ", e.Bucket)
	}
	if e.Key != nil {
		fmt.Fprintf(&b, "key %x: ", e.Key)
	}
	b.WriteString(e.Problem)
	if e.Cause != nil {
		fmt.Fprintf(&b, ": %v", e.Cause)
	}
	return b.String()
}

// Is makes every damage match ErrDamaged.
func (e *Error) Is(target error) bool { return target == ErrDamaged }

// Unwrap returns what was met underneath.
func (e *Error) Unwrap() error { return e.Cause }

// OnPage describes a broken page.
func OnPage(page uint64, format string, args ...any) *Error {
	return &Error{Page: page, HasPage: true, Problem: fmt.Sprintf(format, args...)}
}

// InFile describes a file that is broken as a whole.
func InFile(file, format string, args ...any) *Error {
	return &Error{File: file, Problem: fmt.Sprintf(format, args...)}
}

// Locate adds the volume and the file to a damage that does not name them yet; other errors, and nil, come back unchanged. What the damage
// was wrapped in stays: errors.Is still finds it.
func Locate(err error, volume uint64, file string) error {
	var found *Error
	if !errors.As(err, &found) {
		return err
	}
	copied := *found
	if copied.Volume == 0 {
		copied.Volume = volume
	}
	if copied.File == "" {
		copied.File = file
	}
	switch {
	case copied.Volume == found.Volume && copied.File == found.File:
		return err
	case err == error(found):
		return &copied
	}
	if before, ok := err.(*located); ok {
		err = before.wrapped
	}
	return &located{damage: &copied, wrapped: err}
}

// located is an error around a damage, with a place that the damage inside does not know.
type located struct {
	damage  *Error
	wrapped error
}

func (l *located) Error() string {
	if l.damage.Volume != 0 {
		return fmt.Sprintf("volume %d: %s: %v", l.damage.Volume, l.damage.File, l.wrapped)
	}
	return fmt.Sprintf("%s: %v", l.damage.File, l.wrapped)
}

// Unwrap puts the located damage first, so that errors.As finds that one.
func (l *located) Unwrap() []error { return []error{l.damage, l.wrapped} }
