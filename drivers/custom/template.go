package custom

import (
	"fmt"
	"regexp"
	"slices"
	"strconv"
	"strings"
)

// template is a text with {names}, its escapes already turned into bytes.
type template []piece

type piece struct {
	text string
	name string // instead of text
}

func parseTemplate(text string, names []string) (template, error) {
	var t template
	for text != "" {
		i := strings.IndexAny(text, "{}")
		if i < 0 {
			i = len(text)
		}
		if i > 0 {
			b, err := Bytes(text[:i])
			if err != nil {
				return nil, err
			}
			t = append(t, piece{text: string(b)})
			text = text[i:]
			continue
		}
		end := strings.IndexByte(text, '}')
		if text[0] == '}' || end < 0 {
			return nil, fmt.Errorf(`a brace without its other half in %q; want {name}, or \x7b and \x7d for braces`, text)
		}
		name := text[1:end]
		if !contains(names, name) {
			return nil, fmt.Errorf("unknown name {%s}; want %s", name, list(names))
		}
		t = append(t, piece{name: name})
		text = text[end+1:]
	}
	return t, nil
}

func (t template) has(name string) bool {
	for _, p := range t {
		if p.name == name {
			return true
		}
	}
	return false
}

func (t template) fill(values map[string]string) []byte {
	var b []byte
	for _, p := range t {
		if p.name != "" {
			b = append(b, values[p.name]...)
		} else {
			b = append(b, p.text...)
		}
	}
	return b
}

// Bytes turns the escapes \xHH, \r, \n, \t, \0 and \\ into bytes.
func Bytes(text string) ([]byte, error) {
	var b []byte
	for i := 0; i < len(text); i++ {
		if text[i] != '\\' {
			b = append(b, text[i])
			continue
		}
		i++
		if i == len(text) {
			return nil, fmt.Errorf(`%q ends in a backslash; want \\ for one`, text)
		}
		switch text[i] {
		case 'r':
			b = append(b, '\r')
		case 'n':
			b = append(b, '\n')
		case 't':
			b = append(b, '\t')
		case '0':
			b = append(b, 0)
		case '\\':
			b = append(b, '\\')
		case 'x':
			if i+2 >= len(text) {
				return nil, fmt.Errorf(`%q: \x without two hexadecimal digits`, text)
			}
			v, err := strconv.ParseUint(text[i+1:i+3], 16, 8)
			if err != nil {
				return nil, fmt.Errorf(`%q: \x without two hexadecimal digits`, text)
			}
			b = append(b, byte(v))
			i += 2
		default:
			return nil, fmt.Errorf(`%q: unknown escape \%c; want \xHH, \r, \n, \t, \0 or \\`, text, text[i])
		}
	}
	return b, nil
}

// parsePattern compiles a pattern that must cover the whole answer. One that also covers an
// empty answer would take anything for an answer.
func parsePattern(text string, groups []string) (*regexp.Regexp, error) {
	if text == "" {
		return nil, nil
	}
	if len(text) > 1000 {
		return nil, fmt.Errorf("a pattern of %d characters; want at most 1000", len(text))
	}
	// By itself first: between the anchors "a)|(b" would compile, and they would hold half of it each.
	if _, err := regexp.Compile(text); err != nil {
		return nil, fmt.Errorf("%q is no RE2 pattern: %w", text, err)
	}
	re, err := regexp.Compile(`\A(?:` + text + `)\z`)
	if err != nil {
		return nil, fmt.Errorf("%q is no RE2 pattern between anchors: %w", text, err)
	}
	if re.MatchString("") {
		return nil, fmt.Errorf("%q also matches an empty answer; want a pattern that an answer must fit", text)
	}
	seen := map[string]bool{}
	for _, g := range re.SubexpNames()[1:] {
		switch {
		case g == "":
		case !contains(groups, g):
			return nil, fmt.Errorf("unknown group %q in %q; want %s", g, text, list(groups))
		case seen[g]:
			return nil, fmt.Errorf("group %q twice in %q", g, text)
		}
		seen[g] = true
	}
	return re, nil
}

// groupsOf returns the named groups of an answer, nil if the pattern does not fit.
func groupsOf(re *regexp.Regexp, frame []byte) map[string]string {
	if re == nil {
		return nil
	}
	m := re.FindSubmatch(frame)
	if m == nil {
		return nil
	}
	groups := map[string]string{}
	for i, name := range re.SubexpNames() {
		if name != "" && m[i] != nil {
			groups[name] = string(m[i])
		}
	}
	return groups
}

func hasGroup(re *regexp.Regexp, name string) bool {
	return re != nil && re.SubexpIndex(name) >= 0
}

func contains(names []string, name string) bool {
	return slices.Contains(names, name)
}

func list(names []string) string {
	if len(names) == 0 {
		return "none here"
	}
	return "one of " + strings.Join(names, ", ")
}
