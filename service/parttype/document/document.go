// Package document reads the YAML files that people write: limits files, inspection folders, configuration. It is strict where a
// mistake would otherwise pass for intent (a key that nobody knows, a key given twice, a number in quotes, an alias), and it goes on
// after a fault, so that a person sees everything that is wrong at once, each with its line and the path of its key.
//
// [Parse] gives a [Document]; its [Document.Root] is a [Value], whose getters (Text, Number, Int, Bool, Items, Fields) return what is
// there and note what is not as expected. An absent value answers every getter with zero and notes nothing, so optional keys need no
// branch. [Document.Err] is nil or the [Faults] in the order of their lines.
package document

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"strconv"
	"strings"
	"unicode/utf8"

	"go.yaml.in/yaml/v3"
)

// Limits of what is read; each is named in the fault of a document that is over it.
const (
	MaxBytes  = 256 << 10
	MaxDepth  = 16  // mappings and lists inside each other
	MaxFaults = 100 // faults that are kept; one more line says that there are others
)

// Document is one file being read, with the faults found so far.
type Document struct {
	file   string
	root   *yaml.Node // nil when the file is no document at all
	faults Faults
	more   bool
}

// Parse reads source; file is its name in faults. It never fails: what is wrong is in Err.
func Parse(file string, source []byte) *Document {
	d := &Document{file: file}
	if len(source) > MaxBytes {
		d.add(0, "", "want at most %d bytes, got %d", MaxBytes, len(source))
		return d
	}
	if !utf8.Valid(source) {
		line := 1 + bytes.Count(source[:firstInvalid(source)], []byte{'\n'})
		d.add(line, "", "want UTF-8 text, got other bytes")
		return d
	}
	if need, allowed := cost(source), memory+memoryFactor*len(source); need > allowed {
		d.add(0, "", "want fewer keys and lists: at most %d bytes to hold them, got a file that may need %d", allowed, need)
		return d
	}
	root, err := decode(source)
	switch {
	case err != nil:
		line, text := splitLine(err)
		d.add(line, "", "want well-formed YAML, got a fault of syntax: %s", text)
	case root == nil || len(root.Content) == 0:
		d.add(1, "", "want keys and values, got an empty document")
	default:
		d.root = root.Content[0]
		d.vet(d.root, "", 1)
	}
	return d
}

// Root returns the value that the whole document is.
func (d *Document) Root() Value { return Value{doc: d, node: d.root} }

// Err returns nil, or every fault so far as Faults in the order of their lines.
func (d *Document) Err() error {
	if len(d.faults) == 0 {
		return nil
	}
	return d.Faults()
}

// Faults returns every fault so far in the order of their lines; a last one says when there were more than MaxFaults.
func (d *Document) Faults() Faults {
	all := append(Faults(nil), d.faults...)
	all.sortByLine()
	if d.more {
		all = append(all, Fault{File: d.file, Text: fmt.Sprintf("further faults are not listed, %d are", MaxFaults)})
	}
	return all
}

func (d *Document) add(line int, field, format string, args ...any) {
	if len(d.faults) == MaxFaults {
		d.more = true
		return
	}
	d.faults = append(d.faults, Fault{File: d.file, Line: line, Field: field, Text: fmt.Sprintf(format, args...)})
}

// decode parses the one document of source. The library reports its own broken invariants by panicking; for a reader of files from
// anywhere that is a fault of the file like any other.
func decode(source []byte) (root *yaml.Node, err error) {
	defer func() {
		if r := recover(); r != nil {
			root, err = nil, fmt.Errorf("%v", r)
		}
	}()
	decoder := yaml.NewDecoder(bytes.NewReader(source))
	root = new(yaml.Node)
	if err := decoder.Decode(root); err == io.EOF {
		return nil, nil
	} else if err != nil {
		return nil, err
	}
	if err := decoder.Decode(new(yaml.Node)); err == nil {
		return nil, errors.New("a second document in the file")
	} else if err != io.EOF {
		return nil, err
	}
	return root, nil
}

// A document may allocate memory + memoryFactor times its size, whatever it consists of.
const (
	memory       = 1 << 20
	memoryFactor = 16
)

// cost is an upper bound of what the library allocates for source, in bytes, from the characters that can begin a node: an opening
// bracket and a dash may open a level each, the others end or divide scalars; lines of comment cost their bytes. The figures are measured
// (TestMemory); without the bound a file of nothing but brackets costs 650 times its size.
func cost(source []byte) int {
	const fixed, level, scalar, letter = 64 << 10, 1400, 300, 6
	need := fixed
	comment, begun := false, false // of the present line: it is one, it has begun
	for i, c := range source {
		switch {
		case c == '\n' || c == '\r':
			if !comment {
				need += scalar
			}
			comment, begun = false, false
		case comment || !begun && c == '#':
			comment = true
			need += letter
		case c == '[' || c == '{' || c == '?', c == '-' && (i+1 == len(source) || source[i+1] <= ' '):
			need += level
		case c == ',' || c == ':':
			need += scalar
		default:
			need += letter
		}
		begun = begun || c > ' '
	}
	return need
}

// splitLine takes the line out of the library's message, the only place where it says it. What the library's parser (not its scanner)
// finds is counted from 0 there; a message without a line is of the first, or of no line at all. TestSyntaxLines holds the lines.
func splitLine(err error) (line int, text string) {
	text = strings.TrimPrefix(err.Error(), "yaml: ")
	if rest, found := strings.CutPrefix(text, "line "); found {
		if number, message, found := strings.Cut(rest, ": "); found {
			if n, err := strconv.Atoi(number); err == nil {
				line, text = n, message
			}
		}
	}
	switch text {
	case "did not find expected node content", "did not find expected key", "did not find expected '-' indicator",
		"did not find expected ',' or ']'", "did not find expected ',' or '}'", "did not find expected <document start>":
		line++
	}
	return line, text
}

// vet notes what in the tree under node is not a scalar, a list, or a mapping of plain keys, each once. A node at fault is spoiled: what
// an alias means is a guess, and getters pass over it in silence, so that a person reads of it once. Of a double key the first is read on.
func (d *Document) vet(node *yaml.Node, path string, depth int) {
	spoil := func(format string, args ...any) {
		d.add(node.Line, path, format, args...)
		node.Kind = spoiled
	}
	switch {
	case depth > MaxDepth:
		spoil("want at most %d levels, got more", MaxDepth)
	case node.Kind == yaml.AliasNode || node.Anchor != "":
		spoil("want the value itself, got an anchor or alias")
	case node.Style&yaml.TaggedStyle != 0:
		spoil("want a value without a tag, got the tag %s", excerpt(node.Tag))
	case node.Kind == yaml.SequenceNode:
		for i, item := range node.Content {
			d.vet(item, fmt.Sprintf("%s[%d]", path, i), depth+1)
		}
	case node.Kind == yaml.MappingNode:
		lines := make(map[string]int, len(node.Content)/2)
		for i := 0; i+1 < len(node.Content); i += 2 {
			key, value := node.Content[i], node.Content[i+1]
			if key.Kind != yaml.ScalarNode || key.Anchor != "" || key.Style&yaml.TaggedStyle != 0 {
				d.add(key.Line, path, "want a plain word as key, got something else")
				key.Kind = spoiled
				continue
			}
			if first, twice := lines[key.Value]; twice {
				d.add(key.Line, join(path, key.Value), "want each key once, got it again after line %d", first)
				key.Kind = spoiled
				continue
			}
			lines[key.Value] = key.Line
			d.vet(value, join(path, key.Value), depth+1)
		}
	}
}

// spoiled is the kind of a node that a fault was noted for.
const spoiled yaml.Kind = 0

// join appends a key to a path. Keys come from the file and may be of any length and content.
func join(path, key string) string {
	if len(key) > 64 || strings.ContainsFunc(key, func(r rune) bool { return r < '!' || r > '~' || r == '.' }) {
		key = excerpt(key)
	}
	if path == "" {
		return key
	}
	return path + "." + key
}

func firstInvalid(source []byte) int {
	for i := 0; i < len(source); {
		r, size := utf8.DecodeRune(source[i:])
		if r == utf8.RuneError && size == 1 {
			return i
		}
		i += size
	}
	return len(source)
}
