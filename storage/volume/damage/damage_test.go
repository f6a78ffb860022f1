package damage_test

import (
	"errors"
	"fmt"
	"io"
	"testing"

	"example.com/admit/storage/volume/damage"
)

func TestLocate(t *testing.T) {
	failed := errors.New("commit failed")
	bare := damage.OnPage(3, "torn")
	for _, c := range []struct {
		name string
		err  error
		want string
	}{
		{"bare", bare, "volume 7: f.db: page 3: torn"},
		{"wrapped", fmt.Errorf("%w: %w", failed, bare), "volume 7: f.db: commit failed: page 3: torn"},
		{"other", io.EOF, "EOF"},
	} {
		got := damage.Locate(damage.Locate(c.err, 0, "f.db"), 7, "other.db")
		if got.Error() != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
		if !errors.Is(got, c.err) && c.name != "bare" {
			t.Errorf("%s: the wrapping is lost", c.name)
		}
		var found *damage.Error
		if isDamage := errors.As(got, &found); isDamage != errors.Is(c.err, damage.ErrDamaged) {
			t.Errorf("%s: damage: %v", c.name, isDamage)
		} else if isDamage && (found.Volume != 7 || found.File != "f.db" || found.Page != 3) {
			t.Errorf("%s: found %+v", c.name, found)
		}
	}
	if bare.Volume != 0 || bare.File != "" {
		t.Error("a shared error was written to")
	}
	if damage.Locate(nil, 1, "x") != nil {
		t.Error("nil became an error")
	}
}
