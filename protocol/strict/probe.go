package strict

import (
	"encoding/json"
	"fmt"
	"math"
	"regexp"
	"regexp/syntax"
	"slices"
	"strconv"
	"strings"
	"time"

	"gopkg.in/yaml.v3"

	"gemel/protocol/unit"
)

// probe stands in for a file when a format is described: the reader walks it as it walks a file, each
// question that has more than one answer is answered by a script, and all that is asked is noted.
// Paths are those of findings, with "[]" for any item of a list and "*" for a name of the user's.
type probe struct {
	script map[string]int         // the answers, by the question's id
	prefer func(decision) bool    // of which questions the answer is that the key is there, unless the script says otherwise; nil: of none
	high   bool                   // numbers are as great as they may be, instead of as small
	taken  []decision             // in the order asked
	answer map[string]int         // what was answered, by id
	notes  []note                 // what was asked for
	there  map[string]bool        // by path: the key is there or not
	kind   map[string]yaml.Kind   // by path: what the value is
	not    map[string][]yaml.Kind // by path: what it is not
	angles map[string]unit.Angle  // by path: what was read there
	barred map[string]string      // by path: why the key is refused
	vague  map[string]bool        // by path: what was read of it last says not all of it
	stand  *yaml.Node             // for every value that is there
	limit  int                    // notes left
	units  [][]string             // of every kind
}

// decision is an answer: whether a key is there ("?"), whether a value is keys ("{}") or a list
// ("[]"), which word it is ("="), whether it fits a pattern ("~").
type decision struct {
	id, path, owner string // owner is the path of the keys that the value stands under
	options, chosen int
	words           [][]string // of each answer about words: those it stands for
}

// note is one thing that a reader said of the format.
type note struct {
	what        topic
	path, owner string
	text        string
	shape       *shape
}

type topic string

const (
	asked   topic = "asked"   // the key may be there
	needed  topic = "needed"  // it must be there
	named   topic = "named"   // there are names of the user's here
	closed  topic = "closed"  // what nobody asked for is refused
	valued  topic = "valued"  // what the value has to be
	wrong   topic = "wrong"   // what was answered cannot be together
	decided topic = "decided" // a question was asked
)

// shape is one thing that a value has to be. Of several that a reader asks of one value, only those
// of the highest rank count: text that is read as a time is a time.
type shape struct {
	rank      int
	kind      yaml.Kind
	text      string                // tells it from others
	schema    func() map[string]any // nil of words, lists and keys
	words     [][]string
	wordID    string
	asAny     func([]string) []any
	low, high int // of a list
	fixed     bool
}

// maxNotes ends a reader that asks for ever.
const maxNotes = 50_000

func newProbe(script map[string]int, prefer func(decision) bool, high bool, units [][]string) *probe {
	return &probe{script: script, prefer: prefer, high: high, answer: map[string]int{}, there: map[string]bool{}, kind: map[string]yaml.Kind{},
		not: map[string][]yaml.Kind{}, angles: map[string]unit.Angle{}, barred: map[string]string{}, vague: map[string]bool{}, stand: &yaml.Node{}, limit: maxNotes, units: units}
}

func (p *probe) note(n note) {
	if p.limit--; p.limit < 0 {
		panic(fmt.Sprintf("more than %d questions", maxNotes))
	}
	p.notes = append(p.notes, n)
}

// decide answers a question, the same way each time it is asked.
func (p *probe) decide(d decision) int {
	if chosen, ok := p.answer[d.id]; ok {
		return chosen
	}
	d.chosen = p.script[d.id]
	if _, scripted := p.script[d.id]; !scripted && p.prefer != nil && strings.HasSuffix(d.id, "?") && p.prefer(d) {
		d.chosen = 1
	}
	d.chosen = min(d.chosen, d.options-1)
	p.answer[d.id] = d.chosen
	p.taken = append(p.taken, d)
	p.note(note{what: decided, path: d.path, owner: d.owner, text: d.id[len(d.path):]})
	return d.chosen
}

// has says whether a value is there.
func (p *probe) has(v Value) bool {
	path := v.place.key
	if v.sure != 0 {
		return v.sure > 0
	}
	if there, known := p.there[path]; known {
		return there
	}
	there := p.decide(decision{id: path + "?", path: path, owner: v.owner, options: 2}) == 1
	p.there[path] = there
	if why := p.barred[path]; there && why != "" {
		p.note(note{what: wrong, path: path, owner: v.owner, text: why})
	}
	return there
}

func (p *probe) need(v Value) Value {
	path := v.place.key
	switch there, known := p.there[path]; {
	case v.sure < 0:
	case known && !there:
		p.note(note{what: wrong, path: path, owner: v.owner, text: "missing"})
		v.sure = -1
	default:
		p.there[path] = true
		p.note(note{what: needed, path: path, owner: v.owner})
	}
	return v
}

// bar refuses a key that is or will be there.
func (p *probe) bar(m Map, key, why string) {
	at := m.place.child(key).key
	p.barred[at] = why
	if p.there[at] {
		p.note(note{what: wrong, path: at, owner: m.place.key, text: why})
	}
}

// is answers whether a value is of a kind, in a way that agrees with what was said of it before.
func (p *probe) is(v Value, kind yaml.Kind) bool {
	path := v.place.key
	if !p.has(v) {
		return false
	}
	if k := p.kind[path]; k != 0 {
		return k == kind
	}
	if slices.Contains(p.not[path], kind) {
		return false
	}
	suffix := map[yaml.Kind]string{yaml.MappingNode: "{}", yaml.SequenceNode: "[]"}[kind]
	if p.decide(decision{id: path + suffix, path: path, owner: v.owner, options: 2}) == 1 {
		p.kind[path] = kind
		return true
	}
	p.not[path] = append(p.not[path], kind)
	return false
}

// must takes a value for one of a kind.
func (p *probe) must(v Value, kind yaml.Kind) bool {
	path := v.place.key
	if !p.has(v) {
		return false
	}
	if k := p.kind[path]; k != 0 && k != kind || k == 0 && slices.Contains(p.not[path], kind) {
		p.note(note{what: wrong, path: path, owner: v.owner, text: "of another kind"})
		return false
	}
	p.kind[path] = kind
	return true
}

func (p *probe) see(v Value, s shape) {
	p.note(note{what: valued, path: v.place.key, owner: v.owner, text: s.text, shape: &s})
}

func (p *probe) fail(v Value, found string) {
	if v.sure >= 0 && p.there[v.place.key] || v.sure > 0 {
		if !p.vague[v.place.key] {
			p.note(note{what: wrong, path: v.place.key, owner: v.owner, text: found})
		}
	}
}

// Describe's own answers to the getters of Value. What a number is stays open: the reader gets the
// least or the greatest that is allowed.

func (v Value) probe() *probe {
	if v.doc == nil {
		return nil
	}
	return v.doc.probe
}

func (m Map) probe() *probe {
	if m.doc == nil {
		return nil
	}
	return m.doc.probe
}

func probed[T any](v Value, s shape, like T, or []T) T {
	p := v.probe()
	if !p.must(v, yaml.ScalarNode) {
		return first(or)
	}
	p.vague[v.place.key] = true
	s.kind = yaml.ScalarNode
	p.see(v, s)
	return like
}

// end is the least or the greatest of a range.
func end[T any](p *probe, low, high T) T {
	if p.high {
		return high
	}
	return low
}

// probedWord is one of a number of words, of which those that stand together are alike. The answer is
// the first of them.
func probedWord(v Value, words [][]string, asAny func([]string) []any, or string) string {
	p := v.probe()
	if len(words) == 0 || !p.must(v, yaml.ScalarNode) {
		return or
	}
	p.vague[v.place.key] = false
	var id strings.Builder
	id.WriteString(v.place.key + "=")
	for _, alike := range words {
		id.WriteString(alike[0] + "|")
	}
	k := p.decide(decision{id: id.String(), path: v.place.key, owner: v.owner, options: len(words), words: words})
	p.see(v, shape{rank: specific, kind: yaml.ScalarNode, text: id.String()[len(v.place.key):], words: words, wordID: id.String(), asAny: asAny})
	return words[k][0]
}

// unlike makes each word one of its own.
func unlike(words []string) [][]string {
	all := make([][]string, len(words))
	for i := range words {
		all[i] = words[i : i+1]
	}
	return all
}

func strings2any(words []string) []any {
	all := make([]any, len(words))
	for i, w := range words {
		all[i] = w
	}
	return all
}

func bools(words []string) []any {
	all := make([]any, len(words))
	for i, w := range words {
		all[i] = w == "true"
	}
	return all
}

// units adds the plain number 1, which is how the unit of a share may be written.
func units(words []string) []any {
	all := strings2any(words)
	if slices.Contains(words, "1") {
		all = append(all, json.Number("1"))
	}
	return all
}

// The ranks of shapes.
const (
	vagueText = iota
	anyUnit
	specific
)

// likeText is what every text and every name is while a format is described: one that agrees with
// all others.
const likeText = "a"

func textShape(rank, most int, empty, controls bool) shape {
	return shape{rank: rank, text: fmt.Sprint("text", most, empty, controls), schema: func() map[string]any {
		schema := map[string]any{"type": "string", "maxLength": most}
		if !empty {
			schema["minLength"] = 1
		}
		if !controls {
			schema["pattern"] = `^[^\x00-\x1f\x7f-\x9f]*$`
		}
		return schema
	}}
}

func tokenShape() shape {
	return shape{rank: specific, text: "name", schema: func() map[string]any { return map[string]any{"type": "string", "pattern": namePattern} }}
}

const namePattern = `^[A-Za-z][A-Za-z0-9_-]{0,63}$`

func numberShape(low, high float64) shape {
	return shape{rank: specific, text: fmt.Sprint("number ", low, " ", high), schema: func() map[string]any { return numberSchema(low, high) }}
}

func numberSchema(low, high float64) map[string]any {
	schema := map[string]any{"type": "number"}
	if !math.IsInf(low, 0) {
		schema["minimum"] = low
	}
	if !math.IsInf(high, 0) {
		schema["maximum"] = high
	}
	return schema
}

func intShape(low, high int64) shape {
	return shape{rank: specific, text: fmt.Sprint("whole ", low, " ", high), schema: func() map[string]any {
		return map[string]any{"type": "integer", "minimum": low, "maximum": high}
	}}
}

// quantitySchema is a value with its unit. Its bounds are in its description: a pattern cannot
// compare, but it can tell a sign.
func quantitySchema(kind unit.Kind, negative bool, bounds, suffix string) map[string]any {
	name := "quantity"
	if kind != "" {
		name = string(kind)
	}
	if suffix != "" {
		name += "_per_" + strings.TrimPrefix(suffix, "/")
	}
	if !negative {
		name += "_not_negative"
	}
	schema := map[string]any{"type": "string", "pattern": "^" + unit.Pattern(kind, negative) + suffix + "$", quantityName: name}
	text := `a value with its unit, such as "2 ns" or "50 mW"`
	if kind != "" {
		text = unit.Example(kind)
	}
	if suffix != "" {
		text = fmt.Sprintf("an angle per time such as \"1.5 deg%s\"", suffix)
	}
	if bounds != "" {
		text += "; " + bounds
	}
	schema["description"] = text
	return schema
}

func angleShape(low, high unit.Angle, suffix string) shape {
	return shape{rank: specific, text: fmt.Sprint("angle", suffix, " ", int64(low), " ", int64(high)), schema: func() map[string]any {
		return quantitySchema(unit.Plane, low < 0, fmt.Sprintf("%s%s to %s%s", low, suffix, high, suffix), suffix)
	}}
}

func durationShape(low, high time.Duration) shape {
	return shape{rank: specific, text: fmt.Sprint("time ", int64(low), " ", int64(high)), schema: func() map[string]any {
		return quantitySchema(unit.Time, low < 0, unit.Span(low)+" to "+unit.Span(high), "")
	}}
}

func quantityShape(kind unit.Kind, low, high float64) shape {
	return shape{rank: specific, text: fmt.Sprint(kind, " ", low, " ", high), schema: func() map[string]any {
		bounds := ""
		if !math.IsInf(low, 0) && !math.IsInf(high, 0) {
			bounds = inBase(low, kind) + " to " + inBase(high, kind)
		}
		schema := quantitySchema(kind, low < 0 || kind == unit.Temperature, bounds, "")
		if kind == unit.Share {
			return map[string]any{"anyOf": []any{schema, numberSchema(low, high)}}
		}
		return schema
	}}
}

func anyShape() shape {
	return shape{rank: anyUnit, text: "any", schema: func() map[string]any { return quantitySchema("", true, "", "") }}
}

// finite stands in for bounds that there are not.
func finite(x float64) float64 { return max(-1e6, min(1e6, x)) }

func (p *probe) any(v Value) Quantity {
	q := probed(v, anyShape(), Quantity{Number: "1", Unit: "ms", Kind: unit.Time, Base: 1e-3}, nil)
	if a, ok := p.angles[v.place.key]; ok {
		q = Quantity{Number: a.Fixed(10), Unit: "deg", Kind: unit.Plane, Base: a.Degrees()}
	}
	return q
}

func (p *probe) match(v Value, re *regexp.Regexp) []string {
	if !p.must(v, yaml.ScalarNode) {
		return nil
	}
	id := v.place.key + "~" + re.String()
	p.vague[v.place.key] = false
	if p.decide(decision{id: id, path: v.place.key, owner: v.owner, options: 2}) == 0 {
		return nil
	}
	p.vague[v.place.key] = true // many texts fit
	p.see(v, shape{rank: specific, kind: yaml.ScalarNode, text: re.String(), schema: func() map[string]any {
		return map[string]any{"type": "string", "pattern": re.String()}
	}})
	return re.FindStringSubmatch(sample(re.String()))
}

// sample is a text that a pattern matches: the shortest of its first alternatives.
func sample(pattern string) string {
	tree, err := syntax.Parse(pattern, syntax.Perl)
	if err != nil {
		return ""
	}
	var b strings.Builder
	var write func(*syntax.Regexp)
	write = func(r *syntax.Regexp) {
		switch r.Op {
		case syntax.OpLiteral:
			b.WriteString(string(r.Rune))
		case syntax.OpCharClass:
			b.WriteRune(r.Rune[0])
		case syntax.OpAnyChar, syntax.OpAnyCharNotNL:
			b.WriteString(likeText)
		case syntax.OpConcat, syntax.OpCapture:
			for _, sub := range r.Sub {
				write(sub)
			}
		case syntax.OpAlternate, syntax.OpPlus:
			write(r.Sub[0])
		case syntax.OpRepeat:
			for range r.Min {
				write(r.Sub[0])
			}
		}
	}
	write(tree)
	return b.String()
}

func (p *probe) list(v Value, low, high int) []Value {
	if !p.must(v, yaml.SequenceNode) {
		return nil
	}
	p.vague[v.place.key] = true
	fixed := low == high
	p.see(v, shape{rank: specific, kind: yaml.SequenceNode, text: fmt.Sprint("list ", low, high), low: low, high: high, fixed: fixed})
	items := make([]Value, max(low, min(1, high)))
	for i := range items {
		at := v.place
		at.key += "[]"
		if fixed {
			at.key = v.place.key + "[" + strconv.Itoa(i) + "]"
		}
		items[i] = Value{doc: v.doc, place: at, owner: v.owner, sure: 1}
	}
	return items
}

func (p *probe) keys(v Value) Map {
	m := Map{doc: v.doc, place: v.place}
	if p.must(v, yaml.MappingNode) {
		p.vague[v.place.key] = true
		p.see(v, shape{rank: specific, kind: yaml.MappingNode, text: "keys"})
		m.node = p.stand
	}
	return m
}

func (p *probe) entries(m Map) []Entry {
	at := m.place.child("*")
	p.note(note{what: named, path: at.key, owner: m.place.key})
	return []Entry{{Name: likeText, Key: at, Value: Value{doc: m.doc, place: at, owner: m.place.key, sure: 1}}}
}
