package instruments

import (
	"math"
	"strconv"
	"strings"
	"time"
)

// scpiCommand is one header of the tree. Capital letters of the pattern are the short form,
// [:NODE] may be left out, and a # behind a node means that it takes a numeric suffix.
type scpiCommand struct {
	pattern string
	ask     func(c scpiCall) (string, *scpiError) // nil: there is no query form
	set     func(c scpiCall) *scpiError           // nil: there is no command form
	nodes   []scpiNode
}

// scpiCall is one use of a header.
type scpiCall struct {
	now      time.Time
	args     []argument
	suffixes []int // of the pattern's # nodes, 1 where none was sent
}

// none demands that there are no parameters.
func (c scpiCall) none() *scpiError {
	if len(c.args) > 0 {
		return fault(-108, "")
	}
	return nil
}

type scpiNode struct {
	long, short string
	optional    bool
	suffixed    bool
}

// compile works out the nodes of each pattern.
func compile(list []scpiCommand) []scpiCommand {
	for i := range list {
		p := list[i].pattern
		for p != "" {
			var n scpiNode
			if strings.HasPrefix(p, "[") {
				n.optional = true
				p = p[1:]
			}
			p = strings.TrimPrefix(p, ":")
			end := strings.IndexAny(p, ":[]")
			if end < 0 {
				end = len(p)
			}
			word := p[:end]
			p = p[end:]
			if n.optional {
				p = strings.TrimPrefix(p, "]")
			}
			if strings.HasSuffix(word, "#") {
				n.suffixed = true
				word = word[:len(word)-1]
			}
			n.long = strings.ToUpper(word)
			n.short = strings.TrimRight(word, "abcdefghijklmnopqrstuvwxyz")
			list[i].nodes = append(list[i].nodes, n)
		}
	}
	return list
}

// find looks a header up.
func find(tree []scpiCommand, words []string, query bool) (*scpiCommand, []int, *scpiError) {
	failed := fault(-113, strings.Join(words, ":"))
	for i := range tree {
		c := &tree[i]
		if query && c.ask == nil || !query && c.set == nil {
			continue
		}
		suffixes, err := match(c.nodes, words, nil)
		if err == nil {
			return c, suffixes, nil
		}
		if err.number == -114 {
			failed = err
		}
	}
	return nil, nil, failed
}

// match compares the words of a header with a pattern's nodes.
func match(nodes []scpiNode, words []string, suffixes []int) ([]int, *scpiError) {
	if len(nodes) == 0 {
		if len(words) == 0 {
			return suffixes, nil
		}
		return nil, fault(-113, "")
	}
	n := nodes[0]
	if len(words) > 0 {
		word := strings.TrimRight(words[0], "0123456789")
		digits := words[0][len(word):]
		if word == n.long || word == n.short {
			suffix := 1
			if digits != "" {
				v, err := strconv.Atoi(digits)
				if err != nil || v != 1 && !n.suffixed {
					return nil, fault(-114, words[0])
				}
				suffix = v
			}
			taken := suffixes
			if n.suffixed {
				taken = append(append([]int(nil), suffixes...), suffix)
			}
			if s, err := match(nodes[1:], words[1:], taken); err == nil || err.number == -114 {
				return s, err
			}
		}
	}
	if n.optional {
		if n.suffixed {
			suffixes = append(append([]int(nil), suffixes...), 1)
		}
		return match(nodes[1:], words, suffixes)
	}
	return nil, fault(-113, "")
}

// header is the part of a unit before its parameters.
type header struct {
	common string   // of a * command, without the star
	nodes  []string // capital letters
	rooted bool     // it began with a colon
	query  bool
}

// argument is one parameter.
type argument struct {
	kind rune // 'n' decimal number, '#' other number or block, 's' string, 'c' character data, '(' expression
	text string
	unit string // of a number; capital letters
}

// splitUnits cuts a message at its semicolons, but not at those inside strings and expressions.
func splitUnits(line string) ([]string, *scpiError) {
	if strings.TrimSpace(line) == "" {
		return nil, nil
	}
	var units []string
	for _, part := range splitOutside(line, ';') {
		if strings.TrimSpace(part) == "" {
			if len(units) == 0 {
				return nil, fault(-102, "empty unit")
			}
			return units, fault(-102, "empty unit")
		}
		units = append(units, strings.TrimSpace(part))
	}
	return units, nil
}

func splitOutside(s string, at byte) []string {
	var parts []string
	var quote byte
	depth, begin := 0, 0
	for i := range len(s) {
		switch c := s[i]; {
		case quote != 0:
			if c == quote {
				quote = 0
			}
		case c == '"' || c == '\'':
			quote = c
		case c == '(':
			depth++
		case c == ')':
			depth--
		case c == at && depth <= 0:
			parts = append(parts, s[begin:i])
			begin = i + 1
		}
	}
	return append(parts, s[begin:])
}

func isLetter(c byte) bool { return c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' }
func isDigit(c byte) bool  { return c >= '0' && c <= '9' }

// parseUnit reads one unit: header, then after white space its parameters.
func parseUnit(text string) (header, []argument, *scpiError) {
	var h header
	i := 0
	switch {
	case strings.HasPrefix(text, "*"):
		i = 1
	case strings.HasPrefix(text, ":"):
		h.rooted = true
		i = 1
	}
	star := strings.HasPrefix(text, "*")
	for {
		begin := i
		if i >= len(text) || !isLetter(text[i]) {
			if i < len(text) && text[i] > 126 || i < len(text) && text[i] < 32 {
				return h, nil, fault(-101, "")
			}
			return h, nil, fault(-102, text)
		}
		for i < len(text) && (isLetter(text[i]) || isDigit(text[i]) || text[i] == '_') {
			i++
		}
		word := strings.ToUpper(text[begin:i])
		if len(word) > scpiLongestMnemonic {
			return h, nil, fault(-112, word)
		}
		if star {
			h.common = word
		} else {
			h.nodes = append(h.nodes, word)
		}
		if i >= len(text) || text[i] != ':' || star {
			break
		}
		i++
	}
	if i < len(text) && text[i] == '?' {
		h.query = true
		i++
	}
	if i == len(text) {
		return h, nil, nil
	}
	if text[i] != ' ' && text[i] != '\t' {
		if text[i] > 126 || text[i] < 32 {
			return h, nil, fault(-101, "")
		}
		return h, nil, fault(-111, text)
	}
	var args []argument
	for _, part := range splitOutside(text[i:], ',') {
		a, err := parseArgument(strings.TrimSpace(part))
		if err != nil {
			return h, nil, err
		}
		args = append(args, a)
	}
	return h, args, nil
}

func parseArgument(s string) (argument, *scpiError) {
	if s == "" {
		return argument{}, fault(-102, "empty parameter")
	}
	for i := range len(s) {
		if s[i] < 32 && s[i] != '\t' || s[i] > 126 {
			return argument{}, fault(-101, "")
		}
	}
	switch c := s[0]; {
	case c == '"' || c == '\'':
		body := s[1:]
		var out strings.Builder
		for i := 0; i < len(body); i++ {
			if body[i] != c {
				out.WriteByte(body[i])
				continue
			}
			if i+1 < len(body) && body[i+1] == c {
				out.WriteByte(c)
				i++
				continue
			}
			if i+1 != len(body) {
				return argument{}, fault(-103, s)
			}
			return argument{kind: 's', text: out.String()}, nil
		}
		return argument{}, fault(-151, "")
	case c == '(':
		if !strings.HasSuffix(s, ")") {
			return argument{}, fault(-171, "")
		}
		return argument{kind: '(', text: s}, nil
	case c == '#':
		return argument{kind: '#', text: strings.ToUpper(s)}, nil
	case isLetter(c):
		for i := range len(s) {
			if !isLetter(s[i]) && !isDigit(s[i]) && s[i] != '_' {
				if s[i] == ' ' || s[i] == '\t' {
					return argument{}, fault(-103, s)
				}
				return argument{}, fault(-141, s)
			}
		}
		if len(s) > scpiLongestMnemonic {
			return argument{}, fault(-141, s)
		}
		return argument{kind: 'c', text: strings.ToUpper(s)}, nil
	}
	return parseDecimal(s)
}

// parseDecimal reads integer, fixed or exponent form and the unit behind it.
func parseDecimal(s string) (argument, *scpiError) {
	i := 0
	if s[i] == '+' || s[i] == '-' {
		i++
	}
	digits := 0
	for i < len(s) && isDigit(s[i]) {
		i++
		digits++
	}
	if i < len(s) && s[i] == '.' {
		i++
		for i < len(s) && isDigit(s[i]) {
			i++
			digits++
		}
	}
	if digits == 0 {
		return argument{}, fault(-121, s)
	}
	if digits > scpiLongestMantissa {
		return argument{}, fault(-124, "")
	}
	end := i
	if i < len(s) && (s[i] == 'e' || s[i] == 'E') {
		j := i + 1
		if j < len(s) && (s[j] == '+' || s[j] == '-') {
			j++
		}
		k := j
		for k < len(s) && isDigit(s[k]) {
			k++
		}
		if k > j {
			if e, err := strconv.Atoi(s[j:k]); err != nil || e > scpiLargestExponent {
				return argument{}, fault(-123, "")
			}
			i, end = k, k
		}
	}
	unit := strings.TrimSpace(s[i:])
	if unit != "" && !isLetter(unit[0]) {
		return argument{}, fault(-121, s)
	}
	for k := range len(unit) {
		if !isLetter(unit[k]) && !isDigit(unit[k]) && unit[k] != '/' && unit[k] != '.' {
			return argument{}, fault(-121, s)
		}
	}
	return argument{kind: 'n', text: s[:end], unit: strings.ToUpper(unit)}, nil
}

// quantity is a numeric parameter with its bounds and its units.
type quantity struct {
	low, high, reset float64
	units            map[string]float64 // factor of each unit that may stand behind; the empty one is 1
}

var secondUnits = map[string]float64{"S": 1, "MS": 1e-3, "US": 1e-6, "NS": 1e-9, "MIN": 60, "HR": 3600}

// argument reads the one parameter of a command: a number, or MINimum, MAXimum, DEFault.
func (q quantity) argument(args []argument) (float64, *scpiError) {
	switch {
	case len(args) == 0:
		return 0, fault(-109, "")
	case len(args) > 1:
		return 0, fault(-108, "")
	}
	v, err := q.value(args[0])
	if err != nil {
		return 0, err
	}
	if !(v >= q.low && v <= q.high) {
		return 0, fault(-222, "")
	}
	return v, nil
}

func (q quantity) value(a argument) (float64, *scpiError) {
	switch a.kind {
	case 'c':
		switch a.text {
		case "MIN", "MINIMUM":
			return q.low, nil
		case "MAX", "MAXIMUM":
			return q.high, nil
		case "DEF", "DEFAULT":
			return q.reset, nil
		}
		return 0, fault(-224, a.text)
	case '#':
		if len(a.text) > 2 {
			if base := map[byte]int{'H': 16, 'Q': 8, 'B': 2}[a.text[1]]; base != 0 {
				if n, err := strconv.ParseUint(a.text[2:], base, 53); err == nil {
					return float64(n), nil
				}
				return 0, fault(-121, a.text)
			}
		}
		return 0, fault(-104, "")
	case 'n':
		v, err := strconv.ParseFloat(a.text, 64)
		if err != nil && math.IsInf(v, 0) {
			return 0, fault(-222, "")
		}
		if a.unit == "" {
			return v, nil
		}
		if len(q.units) == 0 {
			return 0, fault(-138, a.unit)
		}
		f, ok := q.units[a.unit]
		if !ok {
			return 0, fault(-131, a.unit)
		}
		return v * f, nil
	}
	return 0, fault(-104, "")
}

// asked answers a query of the quantity, which may ask for MINimum or MAXimum instead.
func (q quantity) asked(c scpiCall, v float64) (float64, *scpiError) {
	switch len(c.args) {
	case 0:
		return v, nil
	case 1:
		if c.args[0].kind == 'c' {
			return q.value(c.args[0])
		}
		return 0, fault(-104, "")
	}
	return 0, fault(-108, "")
}

// wholeArgument reads the one whole number of a command.
func wholeArgument(args []argument, low, high int) (int, *scpiError) {
	switch {
	case len(args) == 0:
		return 0, fault(-109, "")
	case len(args) > 1:
		return 0, fault(-108, "")
	case args[0].kind == 'c':
		return 0, fault(-104, "")
	}
	v, err := quantity{}.value(args[0])
	if err != nil {
		return 0, err
	}
	v = math.RoundToEven(v)
	if !(v >= float64(low) && v <= float64(high)) {
		return 0, fault(-222, "")
	}
	return int(v), nil
}

// booleanArgument reads ON, OFF or a number, of which every one but 0 is ON.
func booleanArgument(args []argument) (bool, *scpiError) {
	switch {
	case len(args) == 0:
		return false, fault(-109, "")
	case len(args) > 1:
		return false, fault(-108, "")
	case args[0].kind == 'c' && args[0].text == "ON":
		return true, nil
	case args[0].kind == 'c' && args[0].text == "OFF":
		return false, nil
	case args[0].kind == 'c':
		return false, fault(-224, args[0].text)
	}
	v, err := quantity{}.value(args[0])
	return math.RoundToEven(v) != 0, err
}

// wordArgument reads one of the words, given in mixed case as in a pattern, and returns its short
// form.
func wordArgument(args []argument, words ...string) (string, *scpiError) {
	switch {
	case len(args) == 0:
		return "", fault(-109, "")
	case len(args) > 1:
		return "", fault(-108, "")
	case args[0].kind == 'n' || args[0].kind == '#':
		return "", fault(-128, "")
	case args[0].kind != 'c':
		return "", fault(-104, "")
	}
	for _, w := range words {
		short := strings.TrimRight(w, "abcdefghijklmnopqrstuvwxyz")
		if args[0].text == short || args[0].text == strings.ToUpper(w) {
			return short, nil
		}
	}
	return "", fault(-224, args[0].text)
}

// nr3 prints a number in exponent form, as NR3 has it.
func nr3(v float64) string {
	return strings.ToUpper(strconv.FormatFloat(v, 'E', 6, 64))
}
