package strict

import (
	"fmt"
	"slices"
	"strconv"
	"strings"

	"gopkg.in/yaml.v3"
)

// Map is one level of keys. Every key must be asked for, by Need, Opt or Entries; Done reports
// the ones nobody asked for.
type Map struct {
	doc   *Doc
	node  *yaml.Node // nil: nothing to read, and the reason was reported
	place Place
	asked map[string]bool
}

// Entry is one key of the user's own choice, and its value.
type Entry struct {
	Name  string
	Key   Place // where the name stands
	Value Value
}

// Place is where the keys stand: the key above them.
func (m Map) Place() Place { return m.place }

// Given says whether there are keys to read.
func (m Map) Given() bool { return m.node != nil }

// Fail reports what is wrong with the keys taken together: the reason lies in which of them are there,
// and in words chosen. So Describe takes it; what lies in other contents is for Value.Fail.
func (m Map) Fail(found, want string) {
	if p := m.probe(); p != nil {
		if m.Given() {
			p.note(note{what: wrong, path: m.place.key, owner: m.place.key, text: found})
		}
		return
	}
	if m.node != nil {
		m.doc.bad[m.node] = true
	}
	m.doc.report(m.place, found, want)
}

// Has says whether a key is written, without asking for it.
func (m Map) Has(key string) bool {
	if p := m.probe(); p != nil {
		return p.has(m.probedValue(key))
	}
	k, _ := m.find(key)
	return k != nil
}

// Need returns the value of a key that must be there.
func (m Map) Need(key string) Value { return m.NeedLike(key, "this key written") }

// NeedLike is Need of a key for which something else may stand, or whose form is worth an example:
// want says so when it is missing.
func (m Map) NeedLike(key, want string) Value {
	v := m.Opt(key)
	if p := m.probe(); p != nil {
		return p.need(v)
	}
	if v.node == nil && m.node != nil {
		at := m.place.child(key)
		m.doc.report(at, "missing", want)
	}
	return v
}

// Opt returns the value of a key that may be there.
func (m Map) Opt(key string) Value {
	if p := m.probe(); p != nil {
		v := m.probedValue(key)
		if m.Given() {
			p.note(note{what: asked, path: v.place.key, owner: v.owner, text: key})
		}
		return v
	}
	if m.asked != nil {
		m.asked[key] = true
	}
	k, n := m.find(key)
	if k == nil {
		return Value{doc: m.doc, place: m.place.child(key)}
	}
	return m.value(k, n)
}

func (m Map) value(k, n *yaml.Node) Value {
	at := m.place.child(k.Value)
	at.line, at.col = n.Line, n.Column
	if n.Tag == "!!null" && n.Kind == yaml.ScalarNode || n.Kind == yaml.MappingNode {
		at.line, at.col = k.Line, k.Column // an empty value stands nowhere, and keys stand under their name
	}
	return Value{doc: m.doc, place: at, node: n}
}

// Later refuses keys that the format foresees and this version does not act on, because a key
// that is ignored is worse than one that is refused.
func (m Map) Later(keys ...string) {
	m.Refuse("not available yet", "no such key in this version", keys...)
}

// Refuse refuses keys with a reason of their own.
func (m Map) Refuse(found, want string, keys ...string) {
	for _, key := range keys {
		if p := m.probe(); p != nil {
			p.bar(m, key, found)
			continue
		}
		k, n := m.find(key)
		if k == nil {
			continue
		}
		m.asked[key] = true
		at := m.place.child(key)
		at.line, at.col = k.Line, k.Column
		m.doc.reportNode(n, at, found, want)
	}
}

// Entries returns the keys that the user named, in the order of the file. The names must be
// NATS tokens, since they become parts of subjects, columns and file names.
func (m Map) Entries() []Entry {
	if m.node == nil {
		return nil
	}
	if p := m.probe(); p != nil {
		return p.entries(m)
	}
	var entries []Entry
	seen := map[string]bool{}
	for i := 0; i+1 < len(m.node.Content); i += 2 {
		k := m.node.Content[i]
		if k.Kind != yaml.ScalarNode || m.doc.bad[k] || seen[k.Value] {
			continue
		}
		seen[k.Value] = true
		m.asked[k.Value] = true
		v := m.value(k, m.node.Content[i+1])
		at := v.place
		at.line, at.col = k.Line, k.Column
		if !isName(k.Value) {
			m.doc.report(at, fmt.Sprintf("the name %q", shorten(k.Value)), `letters, digits, "_" and "-", at most 64, beginning with a letter`)
			continue
		}
		entries = append(entries, Entry{Name: k.Value, Key: at, Value: v})
	}
	return entries
}

// Done reports every key that nobody asked for, and names the nearest one that would do.
func (m Map) Done() {
	if m.node == nil {
		return
	}
	if p := m.probe(); p != nil {
		p.note(note{what: closed, path: m.place.key, owner: m.place.key})
		return
	}
	known := make([]string, 0, len(m.asked))
	for key := range m.asked {
		known = append(known, key)
	}
	slices.Sort(known)
	for i := 0; i+1 < len(m.node.Content); i += 2 {
		k, n := m.node.Content[i], m.node.Content[i+1]
		if k.Kind != yaml.ScalarNode || m.asked[k.Value] || m.doc.bad[k] {
			continue
		}
		at := m.place.child(shorten(k.Value))
		at.line, at.col = k.Line, k.Column
		want := ""
		if !m.doc.full() { // comparing takes time, and hostile files have many keys
			want = wantOneOf(k.Value, known)
		}
		m.doc.reportNode(n, at, "an unknown key", want)
	}
}

// probedValue is the value of a key while a format is described.
func (m Map) probedValue(key string) Value {
	v := Value{doc: m.doc, place: m.place.child(key), owner: m.place.key}
	if !m.Given() {
		v.sure = -1
	}
	return v
}

func (m Map) find(key string) (k, v *yaml.Node) {
	if m.node == nil {
		return nil, nil
	}
	for i := 0; i+1 < len(m.node.Content); i += 2 {
		if n := m.node.Content[i]; n.Kind == yaml.ScalarNode && n.Value == key {
			return n, m.node.Content[i+1]
		}
	}
	return nil, nil
}

// wantOneOf names the nearest allowed word, and all of them if they are few.
func wantOneOf(found string, allowed []string) string {
	quoted := make([]string, len(allowed))
	for i, a := range allowed {
		quoted[i] = strconv.Quote(a)
	}
	near := Nearest(found, allowed)
	switch {
	case len(allowed) == 0:
		return "none"
	case near != "" && len(allowed) > 6:
		return fmt.Sprintf("%q, which is nearest (all: %s)", near, strings.Join(allowed, ", "))
	case near != "" && len(allowed) > 1:
		return fmt.Sprintf("%q, which is nearest, of %s", near, strings.Join(quoted, ", "))
	case len(allowed) == 1:
		return quoted[0]
	}
	return "one of " + strings.Join(allowed, ", ")
}

// maxNear bounds the comparisons of one word.
const maxNear = 300

// Nearest returns the allowed word with the least edits to the one found, or "" if none is near
// enough to have been meant. Of several it takes the first. Words beyond the first few hundred are
// not looked at.
func Nearest(found string, allowed []string) string {
	if len(found) > 64 {
		return ""
	}
	best, least := "", max(2, len(found)/3)+1
	for _, a := range allowed[:min(len(allowed), maxNear)] {
		if d := edits(strings.ToLower(found), strings.ToLower(a)); d < least {
			best, least = a, d
		}
	}
	return best
}

// edits is the distance of Damerau (1964) and Levenshtein (1966), with swaps of neighbours only.
func edits(a, b string) int {
	x, y := []rune(a), []rune(b)
	before, row := make([]int, len(y)+1), make([]int, len(y)+1)
	for j := range row {
		row[j] = j
	}
	for i := range x {
		next := make([]int, len(y)+1)
		next[0] = i + 1
		for j := range y {
			cost := 1
			if x[i] == y[j] {
				cost = 0
			}
			next[j+1] = min(row[j]+cost, row[j+1]+1, next[j]+1)
			if i > 0 && j > 0 && x[i] == y[j-1] && x[i-1] == y[j] {
				next[j+1] = min(next[j+1], before[j-1]+1)
			}
		}
		before, row = row, next
	}
	return row[len(y)]
}
