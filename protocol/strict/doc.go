// Package strict reads the YAML that recipes and bench files share, and takes nothing on trust.
//
// It promises that every finding of a file is reported at once (of more than a hundred, how many
// more), each with file, line, column, key path, what was found and what is wanted; that a value is accepted only if it is written the way
// it is meant; and that hostile input costs a bounded amount of time and memory.
//
// It refuses files over 1 MiB (by their size, unread), more than one document, aliases, anchors,
// merge keys, explicit tags, deep nesting, too many values, duplicate and unknown keys (naming the
// nearest known one), missing keys and empty values, plain numbers where a unit belongs, numbers
// that other readers would take for octal, hexadecimal, infinite or not a number, and every
// spelling of a truth value but true and false.
//
// A caller walks the file through Map and Value, whose getters return a harmless value after a
// finding, so that the walk goes on, and asks Doc.Err at the end.
package strict

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"os"
	"regexp"
	"strconv"
	"strings"
	"unicode/utf8"

	"gopkg.in/yaml.v3"

	"gemel/protocol"
)

// Bounds on what is read at all.
const (
	MaxBytes = 1 << 20
	maxDepth = 24
	maxNodes = 100_000
)

// Doc is one file being read, and the findings so far.
type Doc struct {
	file     string
	root     *yaml.Node // nil when nothing can be read from it
	findings []protocol.Finding
	more     int // findings that were not kept
	bad      map[*yaml.Node]bool
	probe    *probe // not nil while a format is described: there is no file then
}

// ReadFile reads a file's bytes, unless there are more than MaxBytes: then, and only then, the
// error is an *Error.
func ReadFile(path string) ([]byte, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return nil, err
	}
	if info.IsDir() {
		return nil, fmt.Errorf("%s: a folder; want a file", path)
	}
	if info.Size() > MaxBytes {
		return nil, tooLarge(path, info.Size())
	}
	// Size may be a lie (a pipe, a file that grows), so the reading is bounded too.
	text, err := io.ReadAll(io.LimitReader(f, MaxBytes+1))
	if err != nil {
		return nil, err
	}
	if len(text) > MaxBytes {
		return nil, tooLarge(path, int64(len(text)))
	}
	return text, nil
}

func tooLarge(file string, size int64) *Error {
	return &Error{Findings: []protocol.Finding{{File: file, Found: fmt.Sprintf("a file of %d bytes", size), Want: fmt.Sprintf("at most %d bytes (1 MiB)", MaxBytes)}}}
}

// Parse reads one document. It never fails: what is wrong waits in Err, and Root of a file that
// cannot be read is a Map that finds nothing and complains about nothing.
func Parse(file string, text []byte) *Doc {
	d := &Doc{file: file, bad: map[*yaml.Node]bool{}}
	if len(text) > MaxBytes {
		d.findings = tooLarge(file, int64(len(text))).Findings
		return d
	}
	if !utf8.Valid(text) {
		line, col := invalidAt(text)
		d.report(Place{file: file, line: line, col: col}, "bytes that are not UTF-8", "UTF-8 text")
		return d
	}
	root, err := decode(text)
	if err != nil {
		d.reportSyntax(text, err)
		return d
	}
	if root == nil {
		d.report(Place{file: file, line: 1, col: 1}, "an empty file", "keys and values")
		return d
	}
	nodes := 0
	if !d.inspect(root, Place{file: file, line: 1, col: 1}, 0, &nodes) {
		return d
	}
	if root.Kind != yaml.MappingNode {
		d.report(d.placeOf(root, ""), kindName(root), "keys and values, such as \"title: …\"")
		return d
	}
	d.root = root
	return d
}

var errSecond = errors.New("a second document")

type secondDocument struct{ line int }

func (e *secondDocument) Error() string { return fmt.Sprintf("line %d: %v", e.line, errSecond) }

// decode returns the top node of the only document, nil if there is none.
func decode(text []byte) (root *yaml.Node, err error) {
	// The library is not ours and its input may be hostile: its panic is a refused file.
	defer func() {
		if p := recover(); p != nil {
			root, err = nil, fmt.Errorf("the YAML reader gave up: %v", p)
		}
	}()
	dec := yaml.NewDecoder(bytes.NewReader(text))
	var first, second yaml.Node
	switch err := dec.Decode(&first); {
	case errors.Is(err, io.EOF):
		return nil, nil
	case err != nil:
		return nil, err
	}
	switch err := dec.Decode(&second); {
	case errors.Is(err, io.EOF):
	case err != nil:
		return nil, err
	default:
		return nil, &secondDocument{line: second.Line}
	}
	if len(first.Content) == 0 || first.Content[0].Tag == "!!null" && first.Content[0].Value == "" {
		return nil, nil
	}
	return first.Content[0], nil
}

var yamlLine = regexp.MustCompile(`^yaml: line ([0-9]+): (.*)$`)

func (d *Doc) reportSyntax(text []byte, err error) {
	if s, ok := errors.AsType[*secondDocument](err); ok {
		d.report(Place{file: d.file, line: s.line, col: 1}, errSecond.Error(), "one document a file, without \"---\" in it")
		return
	}
	line, what := 1, strings.TrimPrefix(err.Error(), "yaml: ")
	if m := yamlLine.FindStringSubmatch(err.Error()); m != nil {
		line, _ = strconv.Atoi(m[1])
		what = m[2]
	}
	lines := strings.Split(string(text), "\n")
	// The library counts the line of what came before the fault, or the one after it.
	for n := max(line-1, 1); n <= min(line+1, len(lines)); n++ {
		row := lines[n-1]
		if indent := row[:len(row)-len(strings.TrimLeft(row, " \t"))]; strings.Contains(indent, "\t") {
			d.report(Place{file: d.file, line: n, col: strings.Index(row, "\t") + 1}, "a tab in the indentation", "spaces")
			return
		}
	}
	d.report(Place{file: d.file, line: line, col: 1}, what, "YAML")
}

func invalidAt(text []byte) (line, col int) {
	line, col = 1, 1
	for len(text) > 0 {
		r, n := utf8.DecodeRune(text)
		if r == utf8.RuneError && n == 1 {
			return line, col
		}
		if col++; r == '\n' {
			line, col = line+1, 1
		}
		text = text[n:]
	}
	return line, col
}

// inspect refuses what no key of ours could ever allow. It returns false when the walk must end.
func (d *Doc) inspect(n *yaml.Node, at Place, depth int, nodes *int) bool {
	at.line, at.col = n.Line, n.Column
	if *nodes++; *nodes > maxNodes {
		d.report(at, fmt.Sprintf("more than %d values", maxNodes), "fewer")
		return false
	}
	if depth > maxDepth {
		d.report(at, fmt.Sprintf("values nested more than %d deep", maxDepth), "flatter keys")
		return false
	}
	if n.Kind == yaml.AliasNode {
		d.reportNode(n, at, fmt.Sprintf("the alias \"*%s\"", shorten(n.Value)), "the value itself, written out")
		return true
	}
	if n.Anchor != "" {
		d.reportNode(n, at, fmt.Sprintf("the anchor \"&%s\"", shorten(n.Anchor)), "no anchors and no aliases")
	}
	if n.Style&yaml.TaggedStyle != 0 {
		d.reportNode(n, at, fmt.Sprintf("the tag %q", shorten(n.Tag)), "no tags")
	}
	switch n.Kind {
	case yaml.MappingNode:
		return d.inspectMap(n, at, depth, nodes)
	case yaml.SequenceNode:
		for i, item := range n.Content {
			if !d.inspect(item, at.item(i), depth+1, nodes) {
				return false
			}
		}
	}
	return true
}

func (d *Doc) inspectMap(n *yaml.Node, at Place, depth int, nodes *int) bool {
	seen := map[string]*yaml.Node{}
	for i := 0; i+1 < len(n.Content); i += 2 {
		key, value := n.Content[i], n.Content[i+1]
		here := at.child(shorten(key.Value))
		here.line, here.col = key.Line, key.Column
		switch {
		case key.Tag == "!!merge":
			d.reportNode(key, here, "the merge key \"<<\"", "the keys themselves, written out")
		case key.Kind != yaml.ScalarNode:
			here.key = at.key
			d.reportNode(key, here, kindName(key)+" as a key", "a name")
		case key.Anchor != "" || key.Style&yaml.TaggedStyle != 0:
			d.reportNode(key, here, "an anchor or a tag on a key", "the plain key")
		case key.Tag == "!!null" || key.Value == "":
			d.reportNode(key, here, "an empty key", "a name")
		case seen[key.Value] != nil:
			d.reportNode(key, here, fmt.Sprintf("the key a second time (first on line %d)", seen[key.Value].Line), "each key once")
		}
		if key.Kind == yaml.ScalarNode && seen[key.Value] == nil {
			seen[key.Value] = key
		}
		if !d.inspect(value, here, depth+1, nodes) {
			return false
		}
	}
	return true
}

// Root is the file's top level.
func (d *Doc) Root() Map {
	if d.probe != nil {
		return Map{doc: d, node: d.probe.stand}
	}
	return Map{doc: d, node: d.root, place: Place{file: d.file, line: 1, col: 1}, asked: map[string]bool{}}
}

// Readable says whether there is anything to walk: false after a syntax error and its like.
func (d *Doc) Readable() bool { return d.root != nil }

// Fail adds a finding at a place that was kept from this file.
func (d *Doc) Fail(at Place, found, want string) { d.report(at, found, want) }

// Err returns the findings so far, sorted by position, as an *Error; nil if there are none. Of very
// many it returns the first that were found, and a last one that counts the others.
func (d *Doc) Err() error { return join(d.findings, d.more) }

func (d *Doc) report(at Place, found, want string) {
	if d.probe != nil {
		return
	}
	if d.full() {
		d.more++
		return
	}
	d.findings = append(d.findings, at.Finding(found, want))
}

// full says whether further findings are only counted.
func (d *Doc) full() bool { return len(d.findings) >= maxFindings }

// reportNode reports and remembers that the node is not to be read.
func (d *Doc) reportNode(n *yaml.Node, at Place, found, want string) {
	d.bad[n] = true
	d.report(at, found, want)
}

func (d *Doc) placeOf(n *yaml.Node, key string) Place {
	return Place{file: d.file, line: n.Line, col: n.Column, key: key}
}

// kindName says what a node is, for people.
func kindName(n *yaml.Node) string {
	switch n.Kind {
	case yaml.MappingNode:
		return "keys and values"
	case yaml.SequenceNode:
		return "a list"
	case yaml.AliasNode:
		return "an alias"
	}
	if n.Tag == "!!null" {
		return "nothing"
	}
	return strconv.Quote(shorten(n.Value))
}

// shorten keeps a quoted value on one line of a terminal.
func shorten(s string) string {
	const most = 60
	if utf8.RuneCountInString(s) <= most {
		return s
	}
	return string([]rune(s)[:most-1]) + "…"
}
