package inspection

import (
	"encoding/hex"
	"fmt"
	"math"
	"strings"
	"time"
	"unicode/utf8"
)

// String writes the id as a UUID, in lower case with hyphens.
func (id ID) String() string {
	h := hex.EncodeToString(id[:])
	return h[:8] + "-" + h[8:12] + "-" + h[12:16] + "-" + h[16:20] + "-" + h[20:]
}

// ParseID reads a UUID of version 7 (RFC 9562).
func ParseID(text string) (ID, error) {
	var id ID
	bare := strings.ReplaceAll(text, "-", "")
	if len(text) != 36 || len(bare) != 32 || text != strings.ToLower(text) {
		return id, Faultf(Malformed, "inspection", "want a UUID of version 7 in lower case with hyphens, got %q", text)
	}
	if _, err := hex.Decode(id[:], []byte(bare)); err != nil || id.String() != text {
		return ID{}, Faultf(Malformed, "inspection", "want a UUID of version 7 in lower case with hyphens, got %q", text)
	}
	if id[6]>>4 != 7 || id[8]>>6 != 2 {
		return ID{}, Faultf(Malformed, "inspection", "want a UUID of version 7, got %q", text)
	}
	return id, nil
}

// Check returns the first reason why what is said of the inspection cannot be taken, as a Fault of kind Malformed.
func (b *Begin) Check() error {
	if b.ID[6]>>4 != 7 || b.ID[8]>>6 != 2 {
		return Faultf(Malformed, "inspection", "want a UUID of version 7, got %s", b.ID)
	}
	if !knownPurpose(b.Purpose) {
		return Faultf(Malformed, "purpose", "want one of %v, got %q", Purposes(), b.Purpose)
	}
	for _, t := range []struct {
		field, text string
		required    bool
	}{
		{"unit.serial", string(b.Unit.Serial), false},
		{"unit.lot", string(b.Unit.Lot), false},
		{"unit.carrier", b.Unit.Carrier, false},
		{"station", string(b.Station), true},
		{"contact_head", string(b.ContactHead), true},
		{"operator", b.Operator, false},
		{"part_type", b.PartType.Name, true},
		{"calibration", string(b.Calibration), false},
	} {
		if err := checkText(t.field, t.text, t.required); err != nil {
			return err
		}
	}
	if b.Unit.Serial == "" && (b.Unit.Lot == "" || b.Unit.Carrier == "" || b.Unit.Pocket == 0) {
		return Faultf(Malformed, "unit", "want a serial, or lot, carrier and pocket; got lot %q, carrier %q, pocket %d", b.Unit.Lot, b.Unit.Carrier, b.Unit.Pocket)
	}
	if b.Unit.Pocket < 0 || b.Unit.Pocket > 1000000 {
		return Faultf(Malformed, "unit.pocket", "want 1 to 1000000, got %d", b.Unit.Pocket)
	}
	if b.Unit.Attempt < 0 || b.Unit.Attempt > 1000 {
		return Faultf(Malformed, "unit.attempt", "want 1 to 1000, got %d", b.Unit.Attempt)
	}
	if b.PartType.Version < 0 {
		return Faultf(Malformed, "part_type_version", "want at least 1, or 0 for the newest, got %d", b.PartType.Version)
	}
	if y := b.MeasuredAt.Year(); b.MeasuredAt.IsZero() || y < 1970 || y > 2200 {
		return Faultf(Malformed, "measured_at", "want a time in the years 1970 to 2200, got %s", b.MeasuredAt.Format(time.RFC3339))
	}
	if t := b.Temperature; t != nil && !(math.Abs(t.Celsius) <= 500 && t.StandardUncertainty >= 0 && t.StandardUncertainty <= 100) {
		return Faultf(Malformed, "temperature", "want -500 to 500 degrees Celsius with a standard uncertainty of 0 to 100, got %g with %g", t.Celsius, t.StandardUncertainty)
	}
	if b.AnswerWithin < 0 {
		return Faultf(Malformed, "answer_within", "want at least 0, got %v", b.AnswerWithin)
	}
	return nil
}

// checkText holds a name against the limits of names: printable UTF-8 of at most MaxText bytes.
func checkText(field, text string, required bool) error {
	switch {
	case required && text == "":
		return Faultf(Malformed, field, "want a name, got nothing")
	case len(text) > MaxText:
		return Faultf(Malformed, field, "want at most %d bytes, got %d", MaxText, len(text))
	case !utf8.ValidString(text):
		return Faultf(Malformed, field, "want valid UTF-8, got %q", text)
	}
	for _, r := range text {
		if r < ' ' || r == 0x7f {
			return Faultf(Malformed, field, "want printable characters, got %q", text)
		}
	}
	return nil
}

func knownPurpose(p Purpose) bool {
	for _, q := range Purposes() {
		if p == q {
			return true
		}
	}
	return false
}

// Name returns how people call the unit: its serial, or lot, carrier and pocket.
func (u UnitID) Name() string {
	if u.Serial != "" {
		return string(u.Serial)
	}
	return fmt.Sprintf("%s/%s/%d", u.Lot, u.Carrier, u.Pocket)
}
