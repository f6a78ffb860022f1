package document

import (
	"errors"
	"fmt"
	"math"
	"runtime"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// The lines of syntax faults come from the library's texts; this table goes red when those change.
func TestSyntaxLines(t *testing.T) {
	tests := []struct {
		name, source string
		line         int
	}{
		{"brace left open", "a: 1\nb: {c: 2\nd: 3\n", 2},
		{"brace left open on the first line", "{a: 1\nb: 2\n", 2},
		{"bracket left open", "a: 1\nb: [1, 2\n\nc: 3", 2},
		{"indented too far", "a: 1\nb: 2\n c: 3\n", 3},
		{"quote left open", "a: 1\nb: \"x\nd: 3\n", 2},
		{"tab", "a: 1\n\tb: 2\n", 2},
		{"colon in a value", "a: 1\nb: x: y\n", 2},
		{"no colon", "a: 1\nb\nc: 2\n", 2},
		{"two commas", "a: 1\nb:\n  c: {d: 1,, e: 2}\n", 3},
		{"after the end", "a: 1\n...\nb", 3},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			faults := Parse("x.yaml", []byte(test.source)).Faults()
			if len(faults) != 1 || faults[0].Line != test.line || !strings.Contains(faults[0].Text, "well-formed YAML") {
				t.Errorf("got %v, want one fault of syntax in line %d", faults, test.line)
			}
		})
	}
}

func TestNoDocument(t *testing.T) {
	tests := []struct{ name, source, want string }{
		{"nothing", "", "x.yaml:1: want keys and values, got an empty document"},
		{"comments only", "# a\n# b\n", "x.yaml:1: want keys and values, got an empty document"},
		{"two documents", "a: 1\n---\nb: 2\n", "x.yaml: want well-formed YAML, got a fault of syntax: a second document in the file"},
		{"unknown alias", "a: *b\n", "x.yaml: want well-formed YAML, got a fault of syntax: unknown anchor 'b' referenced"},
		{"no UTF-8", "a: 1\nb: \xff\n", "x.yaml:2: want UTF-8 text, got other bytes"},
		{"too long", strings.Repeat("#", MaxBytes+1), fmt.Sprintf("x.yaml: want at most %d bytes, got %d", MaxBytes, MaxBytes+1)},
		{"too deep", "a: " + strings.Repeat("[", 20) + strings.Repeat("]", 20), "want at most 16 levels, got more"},
		{"mapping as key", "a: 1\n? {b: 1}\n: 2\n", "x.yaml:2: want a plain word as key, got something else"},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			err := Parse("x.yaml", []byte(test.source)).Err()
			if err == nil || !strings.Contains(err.Error(), test.want) {
				t.Errorf("got %v, want %s", err, test.want)
			}
		})
	}
}

func TestGetters(t *testing.T) {
	d := Parse("x.yaml", []byte(`
text: 00123
quoted: "25"
number: 2.5e-3
whole: 7
yes: true
list: [a, b]
nothing:
mapping: {inner: 1}
extra: 1
`))
	f, ok := d.Root().Fields("text", "quoted", "number", "whole", "yes", "list", "nothing", "mapping", "absent")
	if !ok {
		t.Fatal(d.Err())
	}
	if text, _ := f.Get("text").Text("a text"); text != "00123" {
		t.Errorf("text %q", text)
	}
	if x, _ := f.Get("number").Number("a number"); x != 2.5e-3 {
		t.Errorf("number %g", x)
	}
	if ns, _ := f.Get("number").ScaledNumber("seconds", 9); ns != 2.5e6 {
		t.Errorf("scaled %g", ns)
	}
	if n, _ := f.Get("whole").Int("1 to 7", 1, 7); n != 7 {
		t.Errorf("int %d", n)
	}
	if b, ok := f.Get("yes").Bool(); !b || !ok {
		t.Error("bool")
	}
	if items, _ := f.Get("list").Items("a list"); len(items) != 2 || items[1].Path() != "list[1]" || items[1].Line() != 7 {
		t.Errorf("items %v", items)
	}
	absent := f.Get("absent")
	_, textOK := absent.Text("")
	_, numberOK := absent.Number("")
	_, fieldsOK := absent.Fields("a")
	if textOK || numberOK || fieldsOK || absent.Present() {
		t.Error("an absent value is there")
	}
	want := []string{`x.yaml:10: extra: want one of the keys`} // so far
	check := func() {
		t.Helper()
		faults := d.Faults()
		if len(faults) != len(want) {
			t.Fatalf("got\n%v\nwant %d faults", faults, len(want))
		}
		for i, fault := range faults {
			if !strings.HasPrefix(fault.Error(), want[i]) {
				t.Errorf("got %s, want %s", fault, want[i])
			}
		}
	}
	check()

	f.Get("quoted").Number("a number")
	f.Get("whole").Int("1 to 6", 1, 6)
	f.Get("list").Text("a text")
	f.Get("nothing").Text("a text")
	f.Get("mapping").Items("a list")
	f.Get("text").Fields("a", "b")
	OneOf(f.Get("text"), "left", "middle", "right")
	f.Need("absent", "something")
	want = []string{
		`x.yaml:2: text: want a mapping with the keys a, b, got 00123`,
		`x.yaml:2: text: want left, middle or right, got 00123`,
		`x.yaml:2: absent: want something, got no such key`,
		`x.yaml:3: quoted: want a number, got the text "25"`,
		`x.yaml:5: whole: want 1 to 6, got 7`,
		`x.yaml:7: list: want a text, got a list of 2`,
		`x.yaml:8: nothing: want a text, got nothing`,
		`x.yaml:9: mapping: want a list, got keys and values`,
		`x.yaml:10: extra: want one of the keys`,
	}
	check()
}

// An alias or a tag is one fault, whatever is asked of the value afterwards.
func TestSpoiledValuesAreToldOnce(t *testing.T) {
	d := Parse("x.yaml", []byte("a: &x 1\nb: *x\nc: !!str d\n"))
	f, _ := d.Root().Fields("a", "b", "c")
	for _, key := range []string{"a", "b", "c"} {
		v := f.Need(key, "a value")
		v.Text("a text")
		v.Number("a number")
		v.Items("a list")
		v.Fields("k")
	}
	if faults := d.Faults(); len(faults) != 3 {
		t.Errorf("got\n%v\nwant three faults", faults)
	}
}

func TestFaultsAreBounded(t *testing.T) {
	var b strings.Builder
	for i := range 1000 {
		fmt.Fprintf(&b, "k%d: 1\n", i)
	}
	d := Parse("x.yaml", []byte(b.String()))
	d.Root().Fields("a")
	faults := d.Faults()
	if len(faults) != MaxFaults+1 || !strings.Contains(faults[MaxFaults].Text, "further faults are not listed") {
		t.Errorf("%d faults, the last: %v", len(faults), faults[len(faults)-1])
	}
	var list Faults
	if !errors.As(d.Err(), &list) {
		t.Error("Err holds no Faults")
	}
}

func TestDecimal(t *testing.T) {
	for _, text := range []string{"", "+", "-", ".", "e5", "1e", "1e+", "0x10", "1_0", "inf", ".inf", "nan", "1e400", "1 ", " 1", "1e1.5", "1..2",
		"1e1234567890", "\u0661"} {
		if x, ok := Decimal(text, 0); ok {
			t.Errorf("%q = %g, want no number", text, x)
		}
	}
	rapid.Check(t, func(t *rapid.T) {
		x := rapid.Float64().Draw(t, "x")
		if math.IsNaN(x) || math.IsInf(x, 0) {
			t.Skip("no decimal number")
		}
		format := rapid.SampledFrom([]byte{'g', 'e', 'E'}).Draw(t, "format")
		got, ok := Decimal(strconv.FormatFloat(x, format, -1, 64), 0)
		if !ok || math.Float64bits(got) != math.Float64bits(x) {
			t.Fatalf("%g came back as %g, %v", x, got, ok)
		}
	})
}

// Whatever the bytes, a document costs at most 1 MiB and 16 times its size.
func TestMemory(t *testing.T) {
	for _, piece := range []string{"[", "[1,", "{a,", "{", "- 1\n", "- - - ", "a: b\n", "? ", "-\n", "!!a ", "&a ", "# \n", "\"\\x\n", ": ", "[],", "{},",
		"[[],", "a:\n", "'a': \"b\"\n", "k: |\n", "a,", "x", "*a ", "- [", "\r", "\u0085"} {
		for _, size := range []int{1 << 10, 1500, 2 << 10, 2500, 3 << 10, 4 << 10, 6 << 10, 8 << 10, 12 << 10, 32 << 10, 64 << 10, 256 << 10} {
			source := []byte(strings.Repeat(piece, size/len(piece)))
			var before, after runtime.MemStats
			runtime.ReadMemStats(&before)
			d := Parse("x.yaml", source)
			runtime.ReadMemStats(&after)
			used, allowed := after.TotalAlloc-before.TotalAlloc, uint64(memory+memoryFactor*len(source))
			if used > allowed {
				t.Errorf("%d bytes of %q took %d bytes, at most %d allowed", len(source), piece, used, allowed)
			}
			runtime.KeepAlive(d)
		}
	}
}

func FuzzParse(f *testing.F) {
	for _, seed := range []string{"a: 1\n", "a: {b: [1, 2]}\n", "- &a x\n- *a\n", "%YAML 1.1\n---\na: |\n  b\n", "? [a]\n: b\n", "a: !!binary x\n", "\ufeffa: 1"} {
		f.Add([]byte(seed))
	}
	f.Fuzz(func(t *testing.T, source []byte) {
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		d := Parse("x.yaml", source)
		d.Root().Fields("a", "b")
		runtime.ReadMemStats(&after)
		// Other goroutines of the fuzzer allocate too: the bound of TestMemory, with room for those.
		if used := after.TotalAlloc - before.TotalAlloc; used > uint64(2<<20+memoryFactor*len(source)) {
			t.Errorf("%d bytes took %d bytes", len(source), used)
		}
		if len(d.Faults()) > MaxFaults+1 {
			t.Errorf("%d faults", len(d.Faults()))
		}
	})
}
