package document

import (
	"fmt"
	"strings"

	"go.yaml.in/yaml/v3"
)

// Value is one value of a document: a scalar, a list, a mapping, or nothing where a key is absent.
type Value struct {
	doc  *Document
	node *yaml.Node // nil: absent
	path string
}

// Present reports whether the value is in the document.
func (v Value) Present() bool { return v.node != nil }

// Path returns the path of the value's key.
func (v Value) Path() string { return v.path }

// Line returns the line on which the value begins; 0 when it is absent.
func (v Value) Line() int {
	if v.node == nil {
		return 0
	}
	return v.node.Line
}

// Fault notes that the value is not what was wanted; nothing where a fault of it was noted already.
func (v Value) Fault(wantFormat string, args ...any) {
	v.Note("want %s, got %s", fmt.Sprintf(wantFormat, args...), v.given())
}

// Note notes another fault of the value, in words that the caller has whole.
func (v Value) Note(format string, args ...any) {
	if v.node != nil && v.node.Kind == spoiled {
		return
	}
	v.doc.add(v.Line(), v.path, format, args...)
}

// given describes the value for a message.
func (v Value) given() string {
	switch {
	case v.node == nil:
		return "nothing"
	case v.node.Kind == yaml.MappingNode:
		return "keys and values"
	case v.node.Kind == yaml.SequenceNode:
		return fmt.Sprintf("a list of %d", len(v.node.Content))
	case v.null():
		return "nothing"
	case quoted(v.node):
		return "the text " + excerpt(v.node.Value)
	}
	return excerptPlain(v.node.Value)
}

// excerptPlain shows a plain scalar as it stands in the file where that reads well.
func excerptPlain(text string) string {
	if len(text) <= 32 && !strings.ContainsFunc(text, func(r rune) bool { return r <= ' ' || r > '~' }) {
		return text
	}
	return excerpt(text)
}

func quoted(node *yaml.Node) bool {
	const styles = yaml.DoubleQuotedStyle | yaml.SingleQuotedStyle | yaml.LiteralStyle | yaml.FoldedStyle
	return node.Style&styles != 0
}

func (v Value) null() bool {
	if v.node.Kind != yaml.ScalarNode || quoted(v.node) {
		return false
	}
	switch v.node.Value {
	case "", "~", "null", "Null", "NULL":
		return true
	}
	return false
}

// IsScalar reports whether the value is a single word, text or number.
func (v Value) IsScalar() bool { return v.node != nil && v.node.Kind == yaml.ScalarNode && !v.null() }

// IsMapping reports whether the value is keys and values.
func (v Value) IsMapping() bool { return v.node != nil && v.node.Kind == yaml.MappingNode }

// Text returns a scalar as it stands in the document, quoted or not: a serial number 00123 keeps its zeros. want says what the text is
// in the fault that is noted where there is a list, a mapping or nothing.
func (v Value) Text(want string) (text string, ok bool) {
	if v.node == nil {
		return "", false
	}
	if !v.IsScalar() {
		v.Fault("%s", want)
		return "", false
	}
	return v.node.Value, true
}

// OneOf returns a scalar that is one of the words.
func OneOf[T ~string](v Value, words ...T) (T, bool) {
	if v.node == nil {
		return "", false
	}
	if v.IsScalar() {
		for _, w := range words {
			if v.node.Value == string(w) {
				return w, true
			}
		}
	}
	names := make([]string, len(words))
	for i, w := range words {
		names[i] = string(w)
	}
	switch {
	case len(names) == 1:
		v.Fault("%s", names[0])
	default:
		last := len(names) - 1
		v.Fault("%s or %s", strings.Join(names[:last], ", "), names[last])
	}
	return "", false
}

// Number returns a decimal number without quotes, finite.
func (v Value) Number(want string) (float64, bool) { return v.ScaledNumber(want, 0) }

// ScaledNumber returns x * 10^exponent for a decimal number x, rounded once: seconds become exact nanoseconds with exponent 9.
func (v Value) ScaledNumber(want string, exponent int) (float64, bool) {
	if v.node == nil {
		return 0, false
	}
	if v.IsScalar() && !quoted(v.node) {
		if x, ok := Decimal(v.node.Value, exponent); ok {
			return x, true
		}
	}
	v.Fault("%s", want)
	return 0, false
}

// Int returns a whole number in plain digits from low to high.
func (v Value) Int(want string, low, high int) (int, bool) {
	if v.node == nil {
		return 0, false
	}
	if v.IsScalar() && !quoted(v.node) {
		if n, ok := whole(v.node.Value); ok && n >= low && n <= high {
			return n, true
		}
	}
	v.Fault("%s", want)
	return 0, false
}

// Bool returns true or false.
func (v Value) Bool() (value, ok bool) {
	if v.node == nil {
		return false, false
	}
	if v.IsScalar() && !quoted(v.node) {
		switch v.node.Value {
		case "true":
			return true, true
		case "false":
			return false, true
		}
	}
	v.Fault("true or false")
	return false, false
}

// Items returns the values of a list.
func (v Value) Items(want string) ([]Value, bool) {
	if v.node == nil {
		return nil, false
	}
	if v.node.Kind != yaml.SequenceNode {
		v.Fault("%s", want)
		return nil, false
	}
	items := make([]Value, len(v.node.Content))
	for i, node := range v.node.Content {
		items[i] = Value{doc: v.doc, node: node, path: fmt.Sprintf("%s[%d]", v.path, i)}
	}
	return items, true
}

// Fields is a mapping whose keys are known.
type Fields struct {
	value  Value
	values map[string]*yaml.Node
	order  []string
}

// Fields returns the mapping that the value is. Every key that is not among keys is noted as a fault.
func (v Value) Fields(keys ...string) (Fields, bool) {
	f := Fields{value: v}
	if v.node == nil {
		return f, false
	}
	if v.node.Kind != yaml.MappingNode {
		v.Fault("a mapping with the keys %s", strings.Join(keys, ", "))
		return f, false
	}
	known := make(map[string]bool, len(keys))
	for _, k := range keys {
		known[k] = true
	}
	f.values = make(map[string]*yaml.Node, len(v.node.Content)/2)
	for i := 0; i+1 < len(v.node.Content); i += 2 {
		key, value := v.node.Content[i], v.node.Content[i+1]
		if key.Kind == spoiled {
			continue
		}
		if !known[key.Value] {
			v.doc.add(key.Line, join(v.path, key.Value), "want one of the keys %s, got an unknown key", strings.Join(keys, ", "))
			continue
		}
		f.values[key.Value] = value
		f.order = append(f.order, key.Value)
	}
	return f, true
}

// Keys returns the known keys that are there, in the order of the document.
func (f Fields) Keys() []string { return f.order }

// Get returns the value of a key; it may be absent.
func (f Fields) Get(key string) Value {
	return Value{doc: f.value.doc, node: f.values[key], path: join(f.value.path, key)}
}

// Need returns the value of a key that must be there; want says what it is in the fault that is noted otherwise.
func (f Fields) Need(key, want string) Value {
	v := f.Get(key)
	if v.node == nil && f.value.node != nil {
		v.doc.add(f.value.Line(), v.path, "want %s, got no such key", want)
	}
	return v
}

// Fault notes a fault of the mapping as a whole, or of how its keys go together.
func (f Fields) Fault(format string, args ...any) {
	f.value.doc.add(f.value.Line(), f.value.path, format, args...)
}
