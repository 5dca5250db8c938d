package strict

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"
	"unicode"

	"gopkg.in/yaml.v3"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// Value is one value of a file, or the absence of one. Its getters take what stands in for an
// absent or a bad value; without that they return the zero value.
type Value struct {
	doc   *Doc
	node  *yaml.Node // nil: absent
	place Place

	// While a format is described: the keys it stands under, and whether it is there (1), is not
	// (-1) or was not asked yet.
	owner string
	sure  int8
}

// Measured is a constant that enters a result: `4.0 ns`, or {value: 4.0 ns, u: 0.2 ns, from: "…"}.
type Measured struct {
	Value float64 // in the base unit of its kind
	U     float64 // standard uncertainty, in the same unit; 0 when none is stated
	From  string  // where the value comes from
}

// Quantity is a value with whatever unit it was written in.
type Quantity struct {
	Number string // as written
	Unit   string // as written
	Kind   unit.Kind
	Base   float64 // in the kind's base unit
}

// Given says whether the value is written.
func (v Value) Given() bool {
	if p := v.probe(); p != nil {
		return p.has(v)
	}
	return v.node != nil
}

// Good says whether the value is written and nothing was found wrong with it so far.
func (v Value) Good() bool {
	if p := v.probe(); p != nil {
		return p.has(v)
	}
	return v.node != nil && !v.doc.bad[v.node]
}

// Place is where the value stands.
func (v Value) Place() Place { return v.place }

// IsList says whether the value is a list.
func (v Value) IsList() bool {
	if p := v.probe(); p != nil {
		return p.is(v, yaml.SequenceNode)
	}
	return v.node != nil && v.node.Kind == yaml.SequenceNode
}

// IsMap says whether the value is keys and values.
func (v Value) IsMap() bool {
	if p := v.probe(); p != nil {
		return p.is(v, yaml.MappingNode)
	}
	return v.node != nil && v.node.Kind == yaml.MappingNode
}

// Fail reports what is wrong with the value. Before its contents are read, and right after Choice,
// Bool, Unit or Match, the reason lies in that answer or in which other keys are there: so Describe
// takes it.
func (v Value) Fail(found, want string) {
	if p := v.probe(); p != nil {
		p.fail(v, found)
		return
	}
	if v.node != nil {
		v.doc.bad[v.node] = true
	}
	v.doc.report(v.place, found, want)
}

// Failf reports the value as it is written, and what is wanted.
func (v Value) Failf(format string, a ...any) { v.Fail(v.written(), fmt.Sprintf(format, a...)) }

func (v Value) written() string {
	if v.node == nil {
		return "nothing"
	}
	if v.node.Kind == yaml.ScalarNode && v.node.Style == 0 && v.node.Tag != "!!str" && v.node.Tag != "!!null" {
		return shorten(v.node.Value) // a plain number reads better without quotes
	}
	return kindName(v.node)
}

// Map returns the keys of the value.
func (v Value) Map() Map {
	if p := v.probe(); p != nil {
		return p.keys(v)
	}
	m := Map{doc: v.doc, place: v.place, asked: map[string]bool{}}
	if v.node == nil || v.doc.bad[v.node] {
		return m
	}
	if v.node.Kind != yaml.MappingNode {
		v.Failf("keys and values")
		return m
	}
	m.node = v.node
	return m
}

// List returns the items of the value, at least low and at most high of them.
func (v Value) List(low, high int) []Value {
	if p := v.probe(); p != nil {
		return p.list(v, low, high)
	}
	if v.node == nil || v.doc.bad[v.node] {
		return nil
	}
	if v.node.Kind != yaml.SequenceNode {
		v.Failf("a list, such as [a, b]")
		return nil
	}
	if n := len(v.node.Content); n < low || n > high {
		want := fmt.Sprintf("%d to %d", low, high)
		if low == high {
			want = strconv.Itoa(low)
		}
		v.Fail(fmt.Sprintf("a list of %d", n), want+" in it")
		return nil
	}
	items := make([]Value, len(v.node.Content))
	for i, n := range v.node.Content {
		at := v.place.item(i)
		at.line, at.col = n.Line, n.Column
		items[i] = Value{doc: v.doc, node: n, place: at}
	}
	return items
}

// scalar returns the text of a single value that nothing was found wrong with.
func (v Value) scalar(want string) (string, bool) {
	if v.node == nil || v.doc.bad[v.node] {
		return "", false
	}
	if v.node.Kind != yaml.ScalarNode || v.node.Tag == "!!null" {
		v.Failf("%s", want)
		return "", false
	}
	return v.node.Value, true
}

func (v Value) quoted() bool { return v.node.Style != 0 }

// Text returns one line of text, not empty, at most 400 characters.
func (v Value) Text(or ...string) string { return v.TextLike("", or...) }

// TextLike is Text of a form that want names, for what is no text: a number there lacks more than
// its quotes.
func (v Value) TextLike(want string, or ...string) string {
	if p := v.probe(); p != nil {
		return probed(v, textShape(vagueText, 400, false, false), likeText, or)
	}
	s, ok := v.scalar(cmp.Or(want, "text"))
	if !ok {
		return first(or)
	}
	if !v.quoted() && v.node.Tag != "!!str" {
		v.Failf("%s", cmp.Or(want, fmt.Sprintf("text: write it in quotes, %q", shorten(s))))
		return first(or)
	}
	if strings.TrimSpace(s) == "" {
		v.Fail("empty text", "some")
		return first(or)
	}
	if len([]rune(s)) > 400 {
		v.Fail(fmt.Sprintf("text of %d characters", len([]rune(s))), "at most 400")
		return first(or)
	}
	if i := strings.IndexFunc(s, unicode.IsControl); i >= 0 {
		v.Fail(fmt.Sprintf("a control character in %q", shorten(s)), "one line of text")
		return first(or)
	}
	return s
}

// Wire returns text that goes over a line: like Text, but control characters are part of it and
// it may be empty.
func (v Value) Wire(or ...string) string {
	if p := v.probe(); p != nil {
		return probed(v, textShape(vagueText, 400, true, true), likeText, or)
	}
	s, ok := v.scalar("text")
	if !ok {
		return first(or)
	}
	if !v.quoted() && v.node.Tag != "!!str" {
		v.Failf("text: write it in quotes, %q", shorten(s))
		return first(or)
	}
	if len(s) > 400 {
		v.Fail(fmt.Sprintf("text of %d bytes", len(s)), "at most 400")
		return first(or)
	}
	return s
}

// Token returns a name that may stand in a NATS subject.
func (v Value) Token(or ...string) string {
	if p := v.probe(); p != nil {
		return probed(v, tokenShape(), likeText, or)
	}
	s, ok := v.scalar("a name")
	if !ok {
		return first(or)
	}
	if !v.quoted() && v.node.Tag != "!!str" || !isName(s) {
		v.Failf(`a name of letters, digits, "_" and "-", at most 64, beginning with a letter`)
		return first(or)
	}
	return s
}

func isName(s string) bool {
	return protocol.IsToken(s) && (s[0] >= 'a' && s[0] <= 'z' || s[0] >= 'A' && s[0] <= 'Z')
}

// Choice returns one of the allowed words.
func (v Value) Choice(allowed []string, or ...string) string {
	if p := v.probe(); p != nil {
		return probedWord(v, unlike(allowed), strings2any, first(or))
	}
	s, ok := v.scalar("one of " + strings.Join(allowed, ", "))
	if !ok {
		return first(or)
	}
	if slices.Contains(allowed, s) {
		return s
	}
	v.Failf("%s", wantOneOf(s, allowed))
	return first(or)
}

// Bool returns true or false, spelt so.
func (v Value) Bool(or ...bool) bool {
	if p := v.probe(); p != nil {
		return probedWord(v, unlike([]string{"false", "true"}), bools, strconv.FormatBool(first(or))) == "true"
	}
	s, ok := v.scalar("true or false")
	if !ok {
		return first(or)
	}
	if v.quoted() || s != "true" && s != "false" {
		v.Failf("true or false")
		return first(or)
	}
	return s == "true"
}

var (
	wholeNumber   = regexp.MustCompile(`^-?(0|[1-9][0-9]{0,17})$`)
	decimalNumber = regexp.MustCompile(`^-?(0|[1-9][0-9]{0,17})(\.[0-9]{1,30})?(e[+-]?[0-9]{1,2})?$`)
)

// Int returns a whole number from low to high, written in decimal.
func (v Value) Int(low, high int64, or ...int64) int64 {
	if p := v.probe(); p != nil {
		return probed(v, intShape(low, high), end(p, low, high), or)
	}
	want := fmt.Sprintf("a whole number from %d to %d", low, high)
	s, ok := v.scalar(want)
	if !ok {
		return first(or)
	}
	n, err := strconv.ParseInt(s, 10, 64)
	if v.quoted() || !wholeNumber.MatchString(s) || err != nil || n < low || n > high {
		v.Failf("%s", want)
		return first(or)
	}
	return n
}

// Number returns a plain number without a unit, from low to high.
func (v Value) Number(low, high float64, or ...float64) float64 {
	if p := v.probe(); p != nil {
		return probed(v, numberShape(low, high), end(p, finite(low), finite(high)), or)
	}
	want := fmt.Sprintf("a number from %g to %g", low, high)
	s, ok := v.scalar(want)
	if !ok {
		return first(or)
	}
	x, err := strconv.ParseFloat(s, 64)
	if v.quoted() || !decimalNumber.MatchString(s) || err != nil || x < low || x > high {
		v.Failf("%s", want)
		return first(or)
	}
	return x
}

// Angle returns an exact angle from low to high.
func (v Value) Angle(low, high unit.Angle, or ...unit.Angle) unit.Angle {
	if p := v.probe(); p != nil {
		a := end(p, low, high)
		if p.has(v) {
			p.angles[v.place.key] = a
		}
		return probed(v, angleShape(low, high, ""), a, or)
	}
	s, ok := v.scalar(unit.Example(unit.Plane))
	if !ok {
		return first(or)
	}
	a, err := unit.ParseAngle(s)
	if err != nil {
		v.failUnit(err, unit.Plane)
		return first(or)
	}
	if a < low || a > high {
		v.Failf("%s to %s", low, high)
		return first(or)
	}
	return a
}

// AnglePer returns an angle per time, written with the suffix behind its unit: "4 deg/s" has the
// suffix "/s", "20 deg/s2" has "/s2".
func (v Value) AnglePer(suffix string, low, high unit.Angle, or ...unit.Angle) unit.Angle {
	if p := v.probe(); p != nil {
		return probed(v, angleShape(low, high, suffix), end(p, low, high), or)
	}
	want := fmt.Sprintf("an angle per time such as \"1.5 deg%s\"", suffix)
	s, ok := v.scalar(want)
	if !ok {
		return first(or)
	}
	text, found := strings.CutSuffix(s, suffix)
	a, err := unit.ParseAngle(text)
	switch {
	case errors.Is(err, unit.ErrNoUnit) && !found:
		v.Fail(shorten(s)+" has no unit", want)
	case !found || err != nil:
		v.Failf("%s", want)
	case a < low || a > high:
		v.Failf("%s%s to %s%s", low, suffix, high, suffix)
	default:
		return a
	}
	return first(or)
}

// Pattern returns a regular expression (RE2) as it is written.
func (v Value) Pattern(or ...string) string {
	s := v.Wire(or...)
	if !v.Good() {
		return first(or)
	}
	if _, err := regexp.Compile(s); err != nil {
		v.Fail(strings.TrimPrefix(err.Error(), "error parsing regexp: "), "an RE2 pattern")
		return first(or)
	}
	return s
}

// Match returns what Regexp.FindStringSubmatch finds in a value that is text; nil if the pattern does
// not match, which is no finding. The pattern is part of the format: Describe tells it.
func (v Value) Match(re *regexp.Regexp) []string {
	if p := v.probe(); p != nil {
		return p.match(v, re)
	}
	if !v.Good() || v.node.Kind != yaml.ScalarNode || !v.quoted() && v.node.Tag != "!!str" {
		return nil
	}
	return re.FindStringSubmatch(v.node.Value)
}

// Duration returns a time from low to high.
func (v Value) Duration(low, high time.Duration, or ...time.Duration) time.Duration {
	if p := v.probe(); p != nil {
		return probed(v, durationShape(low, high), end(p, low, high), or)
	}
	s, ok := v.scalar(unit.Example(unit.Time))
	if !ok {
		return first(or)
	}
	t, err := unit.ParseDuration(s)
	if err != nil {
		v.failUnit(err, unit.Time)
		return first(or)
	}
	if t < low || t > high {
		v.Failf("%s to %s", unit.Span(low), unit.Span(high))
		return first(or)
	}
	return t
}

// Quantity returns a value of the kind, in its base unit, from low to high. A share may be a
// plain number, because one is its unit.
func (v Value) Quantity(kind unit.Kind, low, high float64, or ...float64) float64 {
	if p := v.probe(); p != nil {
		return probed(v, quantityShape(kind, low, high), end(p, finite(low), finite(high)), or)
	}
	s, ok := v.scalar(unit.Example(kind))
	if !ok {
		return first(or)
	}
	if kind == unit.Share && !v.quoted() && decimalNumber.MatchString(s) {
		return v.Number(low, high, or...)
	}
	x, err := unit.Parse(s, kind)
	if err != nil {
		v.failUnit(err, kind)
		return first(or)
	}
	if x < low || x > high || math.IsNaN(x) {
		v.Failf("%s to %s", inBase(low, kind), inBase(high, kind))
		return first(or)
	}
	return x
}

// Any returns a value with whatever unit it carries.
func (v Value) Any() Quantity {
	if p := v.probe(); p != nil {
		return p.any(v)
	}
	const want = `a value with its unit, such as "2 ns" or "50 mW"`
	s, ok := v.scalar(want)
	if !ok {
		return Quantity{}
	}
	base, kind, name, err := unit.ParseAny(s)
	if err != nil {
		if errors.Is(err, unit.ErrNoUnit) {
			v.Fail(shorten(s)+" has no unit", want)
		} else {
			v.failParsed(err, want)
		}
		return Quantity{}
	}
	number, _, _ := strings.Cut(strings.TrimSpace(s), " ")
	return Quantity{Number: strings.TrimSuffix(number, "%"), Unit: name, Kind: kind, Base: base}
}

// Unit returns the spelling of a unit, and its kind. A Fail after it must be for the kind.
func (v Value) Unit() (string, unit.Kind) {
	if p := v.probe(); p != nil {
		name := probedWord(v, p.units, units, "")
		if name == "" {
			return "", ""
		}
		_, kind, _, _ := unit.ParseAny("1 " + name)
		return name, kind
	}
	s, ok := v.scalar("a unit such as mW, Cel or ns")
	if !ok {
		return "", ""
	}
	_, kind, name, err := unit.ParseAny("1 " + s)
	if err != nil || name != s {
		v.Failf("a unit such as mW, Cel or ns")
		return "", ""
	}
	return name, kind
}

// Measured returns a constant with its uncertainty and its source.
func (v Value) Measured(kind unit.Kind, low, high float64, or ...Measured) Measured {
	if !v.Good() {
		return first(or)
	}
	if !v.IsMap() {
		fallback := first(or)
		x := v.Quantity(kind, low, high, fallback.Value)
		if !v.Good() {
			return fallback
		}
		return Measured{Value: x}
	}
	m := v.Map()
	c := Measured{Value: m.Need("value").Quantity(kind, low, high)}
	c.U = m.Opt("u").Difference(kind, 0, math.Inf(1))
	c.From = m.Opt("from").Text()
	m.Done()
	return c
}

// Difference returns a difference of two values of the kind, in its base unit: as Quantity, but
// for temperatures 0.2 K and 0.2 Cel are the same, since a difference has no zero to be shifted by.
func (v Value) Difference(kind unit.Kind, low, high float64, or ...float64) float64 {
	if kind != unit.Temperature || v.probe() != nil {
		return v.Quantity(kind, low, high, or...)
	}
	q := v.Any()
	if !v.Good() {
		return first(or)
	}
	x, err := strconv.ParseFloat(q.Number, 64)
	switch {
	case err != nil || q.Kind != unit.Temperature:
		v.Failf(`a difference of temperatures such as "0.2 K"`)
	case x < low || x > high:
		v.Failf("%g K to %g K", low, high)
	default:
		return x
	}
	return first(or)
}

// allUnits lists all units, those of a kind together.
func allUnits() [][]string {
	var names [][]string
	for _, kind := range unit.Kinds() {
		names = append(names, unit.Units(kind))
	}
	return names
}

func (v Value) failUnit(err error, kind unit.Kind) {
	if errors.Is(err, unit.ErrNoUnit) {
		v.Fail(shorten(v.node.Value)+" has no unit", unit.Example(kind))
		return
	}
	v.failParsed(err, unit.Example(kind))
}

func (v Value) failParsed(err error, want string) {
	if e, ok := errors.AsType[*unit.Error](err); ok {
		v.Fail(shorten(e.Found), e.Want)
		return
	}
	v.Failf("%s", want)
}

// inBase prints a bound in the unit of its kind that makes it shortest to read.
func inBase(x float64, kind unit.Kind) string {
	best, size := "", 0.0
	for _, name := range unit.Units(kind) {
		in, err := unit.In(x, name)
		if err != nil {
			continue
		}
		s := strconv.FormatFloat(in, 'g', 6, 64) + " " + name
		e, mine := strings.Contains(best, "e+"), strings.Contains(s, "e+")
		if best == "" || e && !mine || len(s) < len(best) && !mine || e && mine && math.Abs(in) < size {
			best, size = s, math.Abs(in)
		}
	}
	return strings.TrimSuffix(best, " 1")
}

func first[T any](or []T) T {
	if len(or) > 0 {
		return or[0]
	}
	var zero T
	return zero
}
