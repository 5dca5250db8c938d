package strict

import (
	"bytes"
	"crypto/sha256"
	"encoding/json"
	"fmt"
	"maps"
	"slices"
	"sort"
	"strconv"
	"strings"

	"gopkg.in/yaml.v3"
)

// Bounds on what is tried of one format. They are far beyond the formats there are.
const (
	maxRuns   = 400_000
	maxLeaves = 5_000
	// places are how many of the ways found so far, of those that are refused and of those that are not, a question is
	// tried in before it is believed that nothing else depends on it.
	places = 3
	// maxWords are how many words may be alternatives that change what else is asked in ways that
	// only show together with other keys.
	maxWords = 8
)

// Describe returns a JSON Schema (draft 2020-12) of the format that a reader takes, worked out by
// letting the reader read nothing: whatever it asks is answered one way and another until all ways
// are known that matter. So there is no second list of keys to keep.
//
// Each file that the reader accepts is valid. What the reader finds by comparing contents (bounds of
// values with units, names that must agree, steps that divide) is not in the schema, nor is the
// spelling that YAML alone has (quotes, anchors, a key twice). Rules between keys are, as far as they
// depend on which keys of one level are there and which words they have.
//
// The reader must not depend on anything but the document, must come to an end without one, and may
// tell contents apart by Choice, Bool, Unit and Match, by whether numbers are at their least or their
// greatest, and by nothing else that changes which keys there are. The error says where it does not.
func Describe(title string, read func(*Doc)) (schema json.RawMessage, err error) {
	x := &explorer{read: read, matters: map[string]bool{}, known: map[string]map[string]any{}, grounds: map[string]bool{}, signed: map[string]string{}, units: allUnits()}
	defer func() {
		if p := recover(); p != nil {
			schema, err = nil, fmt.Errorf("strict: the format %q cannot be described: %v", title, p)
		}
	}()
	root := x.keys("", nil)
	root["$schema"] = "https://json-schema.org/draft/2020-12/schema"
	root["title"] = title
	if defs := map[string]any{}; hoist(root, defs) {
		root["$defs"] = defs
	}
	var b bytes.Buffer
	enc := json.NewEncoder(&b)
	enc.SetEscapeHTML(false)
	enc.SetIndent("", " ")
	if err := enc.Encode(root); err != nil {
		return nil, err
	}
	return b.Bytes(), nil
}

// hoist moves the patterns of quantities, which are long and stand in many places, to one place.
func hoist(schema any, defs map[string]any) bool {
	switch s := schema.(type) {
	case map[string]any:
		if name, ok := s[quantityName].(string); ok {
			defs[name] = map[string]any{"type": "string", "pattern": s["pattern"]}
			s["$ref"] = "#/$defs/" + name
			delete(s, quantityName)
			delete(s, "pattern")
			delete(s, "type")
		}
		for _, sub := range s {
			hoist(sub, defs)
		}
	case []any:
		for _, sub := range s {
			hoist(sub, defs)
		}
	}
	return len(defs) > 0
}

// quantityName marks what hoist moves.
const quantityName = "quantity"

// explorer lets a reader read nothing, again and again.
type explorer struct {
	read    func(*Doc)
	runs    int
	units   [][]string
	matters map[string]bool           // questions whose answer changes what else is asked or refused
	known   map[string]map[string]any // schemas of keys by their signatures
	signed  map[string]string         // signatures by what they are of
	grounds map[string]bool           // refusals that depend on nothing outside their keys
}

type script = map[string]int

func (x *explorer) run(s script, prefer func(decision) bool, high bool) *probe {
	if x.runs++; x.runs > maxRuns {
		panic(fmt.Sprintf("more than %d ways", maxRuns))
	}
	p := newProbe(s, prefer, high, x.units)
	x.read(&Doc{bad: map[*yaml.Node]bool{}, probe: p})
	return p
}

// within says whether a path lies at or below another.
func within(path, top string) bool {
	return top == "" || path == top || strings.HasPrefix(path, top) && (path[len(top)] == '.' || path[len(top)] == '[')
}

// refused says whether anything about some keys is refused.
func (p *probe) refused(top string) bool {
	return slices.ContainsFunc(p.notes, func(n note) bool { return n.what == wrong && n.owner == top })
}

// log is what a reader said at and below some keys, in paths that begin there, but for what it said
// of one path unless it refused it.
func (p *probe) log(top, but string) string {
	var b strings.Builder
	for _, n := range p.notes {
		if within(n.owner, top) && (but == "" || n.what == wrong && n.owner == top || !within(n.path, but)) {
			for _, s := range []string{string(n.what), " ", n.path[len(top):], " ", n.text, "\n"} {
				b.WriteString(s)
			}
		}
	}
	return b.String()
}

// way is one way to write some keys: the answers that lead to it, and what the reader said.
type way struct {
	*probe
	script script
	high   bool
}

// ways tries all answers to the questions about some keys that matter.
func (x *explorer) ways(top string, context script) []way {
	var all []way
	for _, high := range []bool{false, true} {
		s := context
		for {
			p := x.run(s, nil, high)
			full := script{}
			maps.Copy(full, context)
			for _, d := range p.taken {
				if d.owner == top && x.matters[d.id] {
					full[d.id] = d.chosen
				}
			}
			all = append(all, way{p, full, high})
			if len(all) > maxLeaves {
				panic(fmt.Sprintf("%q has more than %d ways to be written", top, maxLeaves))
			}
			var here []decision
			for _, d := range p.taken {
				if d.owner == top && x.matters[d.id] {
					here = append(here, d)
				}
			}
			for len(here) > 0 && here[len(here)-1].chosen == here[len(here)-1].options-1 {
				here = here[:len(here)-1]
			}
			if len(here) == 0 {
				break
			}
			s = script{}
			maps.Copy(s, context)
			for _, d := range here {
				s[d.id] = d.chosen
			}
			s[here[len(here)-1].id]++
		}
	}
	return all
}

// explore finds the questions about some keys that matter, and returns all ways to write them.
func (x *explorer) explore(top string, context script) []way {
	for {
		ways, free := x.ways(top, context), x.free(top)
		grown := false
		tried := map[string]int{}
		for _, w := range ways {
			for _, s := range x.states(top, w, free) {
				if s.most == 1 && tried[s.name] > 0 {
					continue
				}
				tried[s.name]++
				p := x.run(s.script, s.prefer, w.high)
				for _, d := range p.taken {
					key := fmt.Sprint(s.name, d.id, p.refused(top))
					if d.owner != top || x.matters[d.id] || tried[key] >= s.most {
						continue
					}
					tried[key]++
					for k := range d.options {
						if k != d.chosen && x.run(with(s.script, d.id, k), s.prefer, w.high).log(top, d.path) != p.log(top, d.path) {
							grown = true
							x.mark(d)
							break
						}
					}
				}
			}
		}
		if !grown {
			return ways
		}
	}
}

// state is what questions are tried in whether they matter.
type state struct {
	name   string
	script script
	prefer func(decision) bool
	most   int // times
}

// states are one way to write some keys with none of the free ones, with all of them, and with one
// word after the other that is not the first.
func (x *explorer) states(top string, w way, free func(decision) bool) []state {
	name := fmt.Sprint(w.high, w.refused(top))
	all := []state{{name, w.script, nil, places}, {"full " + name, w.script, free, places}}
	for _, d := range x.run(w.script, free, w.high).taken {
		if !free(d) || d.words == nil || len(d.words) > maxWords {
			continue
		}
		for k := 1; k < len(d.words); k++ {
			all = append(all, state{fmt.Sprint(d.id, k, name), with(with(w.script, d.path+"?", 1), d.id, k), nil, 1})
		}
	}
	return all
}

// free says which of some keys may be there without any of the others minding.
func (x *explorer) free(top string) func(decision) bool {
	matters := maps.Clone(x.matters) // as they are now: what is compared must not change under way
	return func(d decision) bool { return d.owner == top && !matters[d.id] }
}

// mark says that a question matters, and so whether the value is there at all and of its kind: else
// it is not asked.
func (x *explorer) mark(d decision) {
	x.matters[d.id] = true
	for path := d.path; ; path = path[:strings.LastIndexByte(path, '[')] {
		for _, suffix := range []string{"?", "{}", "[]"} {
			x.matters[path+suffix] = true
		}
		if !strings.HasSuffix(path, "]") || len(path) <= len(d.owner)+1 {
			return
		}
	}
}

func with(s script, id string, k int) script {
	s = maps.Clone(s)
	if s == nil {
		s = script{}
	}
	s[id] = k
	return s
}

// context keeps the answers that lead to some keys and that what stands there can depend on: those
// about the keys above that matter, and that the keys are there at all.
func (x *explorer) context(p *probe, top string) script {
	s := script{}
	for _, d := range p.taken {
		if within(top, d.owner) && d.owner != top && (x.matters[d.id] || within(top, d.path)) {
			s[d.id] = d.chosen
		}
	}
	return s
}

// keys is the schema of some keys.
func (x *explorer) keys(top string, above *probe) map[string]any {
	var context script
	if above != nil {
		context = x.context(above, top)
	}
	// What is asked in the same way is the same, wherever it stands.
	id := x.signature(top, context)
	if known, ok := x.known[id]; ok {
		return known
	}
	x.known[id] = map[string]any{} // so that a format within itself would come to an end
	var forms []form
	for _, w := range x.explore(top, context) {
		if !x.refused(top, w) {
			forms = append(forms, x.form(top, w))
		}
	}
	if len(forms) == 0 {
		panic(fmt.Sprintf("%q: all ways to write it are refused", top))
	}
	schema := describe(forms, x.literals(top, forms))
	x.known[id] = schema
	return schema
}

// signature tells apart the formats that stand at one path, depending on what stands above.
func (x *explorer) signature(top string, context script) string {
	id := fmt.Sprint(top, context) // in the order of the ids
	if known, ok := x.signed[id]; ok {
		return known
	}
	var b strings.Builder
	below := func(d decision) bool { return within(d.owner, top) }
	for _, high := range []bool{false, true} {
		b.WriteString(x.run(context, nil, high).log(top, ""))
		full := x.run(context, below, high)
		b.WriteString(full.log(top, ""))
		for _, d := range full.taken {
			if below(d) && d.words != nil && len(d.words) <= maxWords {
				for k := range d.options {
					b.WriteString(x.run(with(context, d.id, k), below, high).log(top, ""))
				}
			}
		}
	}
	hash := sha256.Sum256([]byte(b.String()))
	x.signed[id] = string(hash[:])
	return x.signed[id]
}

// refused says whether a way to write some keys is refused whatever else the file says.
func (x *explorer) refused(top string, w way) bool {
	for _, n := range w.notes {
		if n.what != wrong || n.owner != top {
			continue
		}
		ground := n.path + " " + n.text
		holds, known := x.grounds[ground]
		if !known {
			holds = x.stands(top, w, n)
			x.grounds[ground] = holds
		}
		if holds {
			return true
		}
	}
	return false
}

// stands says whether a refusal stays, whatever is answered about other keys.
func (x *explorer) stands(top string, w way, n note) bool {
	for _, d := range w.taken {
		if within(d.owner, top) || within(top, d.path) {
			continue
		}
		for k := range d.options {
			other := x.run(with(w.script, d.id, k), nil, w.high)
			there := slices.ContainsFunc(other.notes, func(o note) bool { return o.owner == top && o.what != decided })
			same := slices.ContainsFunc(other.notes, func(o note) bool { return o.what == wrong && o.path == n.path && o.text == n.text })
			if there && !same {
				return false
			}
		}
	}
	return true
}

// form is what one way to write some keys allows and demands.
type form struct {
	way      way
	allowed  map[string]bool
	required map[string]bool
	values   map[string]alternatives
	names    alternatives // of what stands under the user's names
	named    bool
	closed   bool
}

// alternatives are schemas of which one has to hold, by their text.
type alternatives map[string]map[string]any

func (a alternatives) add(schema map[string]any) {
	text, err := json.Marshal(schema)
	if err != nil {
		panic(err)
	}
	a[string(text)] = schema
}

func (x *explorer) form(top string, w way) form {
	f := form{way: w, allowed: map[string]bool{}, required: map[string]bool{}, values: map[string]alternatives{}, names: alternatives{}}
	for _, n := range w.notes {
		if n.owner != top {
			continue
		}
		switch n.what {
		case asked:
			f.allowed[n.text] = true
		case closed:
			f.closed = true
		case named:
			f.named = true
			f.names.add(x.value(n.path, w.probe))
		}
	}
	runs := x.fillings(top, w)
	for key := range f.allowed {
		path := (Place{key: top}).child(key).key
		there, decided := w.answer[path+"?"]
		switch {
		case decided && x.matters[path+"?"]:
			f.required[key] = there == 1
			f.allowed[key] = there == 1
		case !decided:
			f.required[key] = w.there[path]
		}
		if !f.allowed[key] {
			continue
		}
		values := alternatives{}
		for _, p := range runs {
			if p.there[path] {
				values.add(x.value(path, p))
			}
		}
		if len(values) == 0 { // nobody looked at it
			values.add(map[string]any{})
		}
		f.values[key] = values
	}
	return f
}

// fillings are runs of one way in which all its keys are there that are free to be.
func (x *explorer) fillings(top string, w way) []*probe {
	ours := x.free(top)
	// Free keys do not matter to one another, so that all can be let in at once.
	full := x.run(w.script, ours, w.high)
	runs := []*probe{w.probe, full}
	for _, d := range full.taken {
		if d.owner != top || x.matters[d.id] || d.words != nil {
			continue
		}
		for k := range d.options {
			switch {
			case k == d.chosen:
			case !strings.HasSuffix(d.id, "?"): // another kind of value, or one that fits a pattern
				runs = append(runs, x.run(with(w.script, d.id, k), ours, w.high))
			case full.refuses(top, w.probe): // then one by one
				runs = append(runs, x.run(with(w.script, d.id, 1), nil, w.high))
			}
		}
	}
	return slices.DeleteFunc(runs, func(p *probe) bool { return p.refuses(top, w.probe) })
}

// refuses says whether something about some keys is refused that is not in another run.
func (p *probe) refuses(top string, but *probe) bool {
	return slices.ContainsFunc(p.notes, func(n note) bool {
		return n.what == wrong && n.owner == top && !slices.ContainsFunc(but.notes, func(o note) bool { return o.what == wrong && o.path == n.path && o.text == n.text })
	})
}

// value is the schema of what stands at a path in one way.
func (x *explorer) value(path string, p *probe) map[string]any {
	best := &shape{rank: -1}
	var all []map[string]any
	for _, n := range p.notes {
		if n.what != valued || n.path != path || n.shape.rank < best.rank {
			continue
		}
		if n.shape.rank > best.rank {
			all = nil
		}
		if s := n.shape; s.kind == yaml.SequenceNode && best.kind == s.kind {
			both := *best
			both.low, both.high = max(s.low, best.low), min(s.high, best.high)
			best = &both
			continue
		}
		best = n.shape
		switch {
		case best.words != nil:
			words := best.words
			// One item stands for all of a list, so that its word is not the only one.
			if x.matters[best.wordID] && !strings.HasSuffix(path, "[]") {
				words = words[p.answer[best.wordID]:][:1]
			}
			all = append(all, map[string]any{"enum": best.asAny(slices.Concat(words...))})
		case best.kind == yaml.MappingNode:
			all = append(all, x.keys(path, p))
		case best.kind == yaml.ScalarNode:
			all = append(all, best.schema())
		}
	}
	if best.kind == yaml.SequenceNode {
		return x.list(path, *best, p)
	}
	both := alternatives{}
	for _, s := range all {
		both.add(s)
	}
	switch schemas := both.sorted(); len(schemas) {
	case 0:
		return map[string]any{}
	case 1:
		return schemas[0].(map[string]any)
	default:
		return map[string]any{"allOf": schemas}
	}
}

func (x *explorer) list(path string, s shape, p *probe) map[string]any {
	schema := map[string]any{"type": "array", "minItems": s.low, "maxItems": s.high}
	if !s.fixed {
		schema["items"] = x.value(path+"[]", p)
		return schema
	}
	items := make([]any, s.low)
	for i := range items {
		items[i] = x.value(path+"["+strconv.Itoa(i)+"]", p)
	}
	schema["prefixItems"], schema["items"] = items, false
	return schema
}

func (a alternatives) sorted() []any {
	all := make([]any, 0, len(a))
	for _, text := range slices.Sorted(maps.Keys(a)) {
		all = append(all, a[text])
	}
	return all
}

// schema is one of the alternatives. Words are put together.
func (a alternatives) schema() map[string]any {
	var rest, words []any
	seen := map[string]bool{}
	for _, s := range a.sorted() {
		s := s.(map[string]any)
		enum, ok := s["enum"].([]any)
		switch {
		case len(s) == 0:
			return map[string]any{}
		case !ok:
			rest = append(rest, s)
		}
		for _, w := range enum {
			if text := fmt.Sprintf("%T %v", w, w); !seen[text] {
				seen[text] = true
				words = append(words, w)
			}
		}
	}
	if words != nil {
		sort.Slice(words, func(i, j int) bool { return fmt.Sprint(words[i]) < fmt.Sprint(words[j]) })
		rest = append(rest, map[string]any{"enum": words})
	}
	switch len(rest) {
	case 0:
		return map[string]any{}
	case 1:
		return rest[0].(map[string]any)
	}
	return map[string]any{"anyOf": rest}
}

// literal is a condition on one key that other rules of the same keys hang on.
type literal struct {
	key   string
	words []any
	when  map[string]any
	holds func(form) bool
}

// literals lists the conditions that the forms differ in.
func (x *explorer) literals(top string, forms []form) []literal {
	seen := map[string]bool{}
	var all []literal
	for _, f := range forms {
		for _, d := range f.way.taken {
			key, _ := strings.CutPrefix(strings.TrimPrefix(d.path, top), ".")
			if d.owner != top || !x.matters[d.id] || seen[d.id] || strings.ContainsAny(key, "[.*") {
				continue
			}
			seen[d.id] = true
			add := func(k int, words []any, schema map[string]any) {
				when := map[string]any{"required": []string{key}}
				if schema != nil {
					when["properties"] = map[string]any{key: schema}
				}
				all = append(all, literal{key: key, words: words, when: when, holds: func(f form) bool {
					if chosen, ok := f.way.answer[d.id]; ok {
						return chosen == k
					}
					return f.allowed[key] // nobody asked: it may be so
				}})
			}
			switch {
			case strings.HasSuffix(d.id, "?"):
				add(1, nil, nil)
			case strings.HasSuffix(d.id, "{}"):
				add(1, nil, map[string]any{"type": "object"})
			case d.words != nil:
				asAny := x.asAny(f, d.id)
				for k, alike := range d.words {
					add(k, asAny(alike), map[string]any{"enum": asAny(alike)})
				}
			}
		}
	}
	sort.SliceStable(all, func(i, j int) bool { return all[i].key < all[j].key })
	return all
}

// asAny is how the words of a question are written in JSON.
func (*explorer) asAny(f form, id string) func([]string) []any {
	for _, n := range f.way.notes {
		if n.shape != nil && n.shape.wordID == id {
			return n.shape.asAny
		}
	}
	return strings2any
}

// facts are what several forms have in common: a key is allowed if one allows it, required if all
// require it.
func facts(forms []form) form {
	f := form{allowed: map[string]bool{}, required: map[string]bool{}, values: map[string]alternatives{}, names: alternatives{}, closed: true}
	for _, one := range forms {
		f.closed = f.closed && one.closed
		f.named = f.named || one.named
		maps.Copy(f.names, one.names)
		for key, ok := range one.allowed {
			if !ok {
				continue
			}
			f.allowed[key] = true
			if f.values[key] == nil {
				f.values[key] = alternatives{}
			}
			maps.Copy(f.values[key], one.values[key])
		}
	}
	for key := range f.allowed {
		f.required[key] = !slices.ContainsFunc(forms, func(one form) bool { return !one.required[key] })
	}
	return f
}

// describe puts forms together: the keys of all, and what follows from each condition.
func describe(forms []form, literals []literal) map[string]any {
	all := facts(forms)
	schema := map[string]any{"type": "object"}
	properties := map[string]any{}
	for key := range all.allowed {
		properties[key] = all.values[key].schema()
	}
	if len(properties) > 0 {
		schema["properties"] = properties
	}
	if required := sortedTrue(all.required); len(required) > 0 {
		schema["required"] = required
	}
	if all.named {
		schema["patternProperties"] = map[string]any{namePattern: all.names.schema()}
	}
	if all.closed || all.named {
		schema["additionalProperties"] = false
	}
	rules := someOf(forms, all.required)
	at := map[string]int{} // index of the rule by key and what follows
	for _, l := range literals {
		var those []form
		for _, f := range forms {
			if l.holds(f) {
				those = append(those, f)
			}
		}
		if len(those) == 0 {
			continue // such a value is refused where it stands
		}
		then := follows(facts(those), all, l.key)
		if len(then) == 0 {
			continue
		}
		text, err := json.Marshal(then)
		if err != nil {
			panic(err)
		}
		id := fmt.Sprint(l.key, l.words != nil, string(text))
		if i, ok := at[id]; ok && l.words != nil { // another word with the same consequences
			property := rules[i].(map[string]any)["if"].(map[string]any)["properties"].(map[string]any)[l.key].(map[string]any)
			if enum, ok := property["enum"].([]any); ok {
				property["enum"] = append(enum, l.words...)
				continue
			}
		}
		at[id] = len(rules)
		rules = append(rules, map[string]any{"if": l.when, "then": then})
	}
	if rules != nil {
		schema["allOf"] = rules
	}
	return schema
}

// follows is what some forms demand beyond all of them, of other keys than one.
func follows(those, all form, but string) map[string]any {
	then := map[string]any{}
	var required []string
	for _, key := range sortedTrue(those.required) {
		if !all.required[key] && key != but {
			required = append(required, key)
		}
	}
	if required != nil {
		then["required"] = required
	}
	properties := map[string]any{}
	for key := range all.allowed {
		switch {
		case key == but:
		case !those.allowed[key]:
			properties[key] = false
		case len(those.values[key]) < len(all.values[key]):
			properties[key] = those.values[key].schema()
		}
	}
	if len(properties) > 0 {
		then["properties"] = properties
	}
	return then
}

// someOf lists sets of keys of which at least one has to be there: the least ones that are not
// implied by smaller ones, at most maxSome.
func someOf(forms []form, always map[string]bool) []any {
	var keys []string
	for _, f := range forms {
		for _, key := range sortedTrue(f.required) {
			if !always[key] && !slices.Contains(keys, key) {
				keys = append(keys, key)
			}
		}
	}
	slices.Sort(keys)
	keys = keys[:min(len(keys), 32)]
	demands := map[uint32]bool{}
	for _, f := range forms {
		var set uint32
		for i, key := range keys {
			if f.required[key] {
				set |= 1 << i
			}
		}
		demands[set] = true
	}
	const maxSize, maxSome = 5, 6
	var found []uint32
	var grow func(set uint32, next, size int)
	grow = func(set uint32, next, size int) {
		if size == 0 {
			for d := range demands {
				if d&set == 0 {
					return
				}
			}
			if !slices.ContainsFunc(found, func(less uint32) bool { return less&set == less }) {
				found = append(found, set)
			}
			return
		}
		for i := next; i < len(keys) && len(found) < maxSome; i++ {
			grow(set|1<<i, i+1, size-1)
		}
	}
	for size := 2; size <= maxSize; size++ {
		grow(0, 0, size)
	}
	var all []any
	for _, set := range found {
		var some []any
		for i, key := range keys {
			if set&(1<<i) != 0 {
				some = append(some, map[string]any{"required": []string{key}})
			}
		}
		all = append(all, map[string]any{"anyOf": some})
	}
	return all
}

func sortedTrue(set map[string]bool) []string {
	var keys []string
	for key, ok := range set {
		if ok {
			keys = append(keys, key)
		}
	}
	slices.Sort(keys)
	return keys
}
