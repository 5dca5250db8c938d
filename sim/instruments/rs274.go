package instruments

import (
	"fmt"
	"strconv"
	"strings"
)

// block is one line of RS-274/NGC. Clause numbers below are those of the RS274/NGC Interpreter,
// version 3, as quoted in standards.md section 2.1.
type block struct {
	deleted bool  // it began with /
	empty   bool  // no words
	gs      []int // G numbers in tenths: G92.1 is 921
	axes    []axisWord
	feed    float64
	hasFeed bool
}

type axisWord struct {
	letter string
	deg    float64
}

// The modal groups of the G words this controller has [3.4]. Two words of one group on a line
// are an error. Group 0 is not modal.
var groupOf = map[int]int{0: 1, 10: 1, 900: 3, 940: 5, 200: 6, 210: 6, 540: 12, 921: 0}

// maxBlock is the longest line [3.3].
const maxBlock = 256

// parseBlock reads one line strictly: anything not explicitly allowed is an error [3.3]. letters
// are the axis letters there are.
func parseBlock(line, letters string) (block, error) {
	b := block{empty: true}
	if len(line) > maxBlock {
		return b, fmt.Errorf("line longer than %d characters", maxBlock)
	}
	s, err := strip(line)
	if err != nil {
		return b, err
	}
	if strings.HasPrefix(s, "/") {
		b.deleted = true
		s = s[1:]
	}
	groups := map[int]bool{}
	for first := true; s != ""; first = false {
		letter := s[0]
		if letter < 'A' || letter > 'Z' {
			return b, fmt.Errorf("character %q where a word begins", letter)
		}
		text := s[1:]
		n := strings.IndexFunc(text, func(r rune) bool { return !strings.ContainsRune("+-.0123456789", r) })
		if n < 0 {
			n = len(text)
		}
		text, s = text[:n], text[n:]
		if letter == 'N' {
			if !first {
				return b, fmt.Errorf("line number not in front")
			}
			if len(text) < 1 || len(text) > 5 || strings.Trim(text, "0123456789") != "" { // [3.3.1]
				return b, fmt.Errorf("line number %q", text)
			}
			continue
		}
		v, err := realNumber(text)
		if err != nil {
			return b, fmt.Errorf("%c: %w", letter, err)
		}
		b.empty = false
		switch {
		case letter == 'G':
			g, err := gNumber(v)
			if err != nil {
				return b, err
			}
			group, ok := groupOf[g]
			if !ok {
				return b, fmt.Errorf("no G%s here", strconv.FormatFloat(v, 'f', -1, 64))
			}
			if groups[group] {
				return b, fmt.Errorf("two G words of one group")
			}
			groups[group] = true
			b.gs = append(b.gs, g)
		case letter == 'F':
			if b.hasFeed {
				return b, fmt.Errorf("two F words")
			}
			if v < 0 {
				return b, fmt.Errorf("negative F")
			}
			b.feed, b.hasFeed = v, true
		case strings.IndexByte(letters, letter) >= 0:
			for _, w := range b.axes {
				if w.letter == string(letter) {
					return b, fmt.Errorf("two %c words", letter)
				}
			}
			b.axes = append(b.axes, axisWord{string(letter), v})
		default:
			return b, fmt.Errorf("no %c words here", letter)
		}
	}
	return b, nil
}

// strip removes spaces, tabs and comments, and makes letters capital [3.3, 3.3.4].
func strip(line string) (string, error) {
	var out strings.Builder
	comment := false
	for i := range len(line) {
		c := line[i]
		switch {
		case comment && c == '(':
			return "", fmt.Errorf("comment inside a comment")
		case comment:
			comment = c != ')'
		case c == '(':
			comment = true
		case c == ')':
			return "", fmt.Errorf("comment ends that never began")
		case c == ' ' || c == '\t':
		case c >= 'a' && c <= 'z':
			out.WriteByte(c - 'a' + 'A')
		default:
			out.WriteByte(c)
		}
	}
	if comment {
		return "", fmt.Errorf("comment without end")
	}
	return out.String(), nil
}

// realNumber reads sign, digits, point, digits; there is no exponent [3.3.2.1].
func realNumber(s string) (float64, error) {
	digits := strings.TrimLeft(s, "+-")
	if len(s)-len(digits) > 1 {
		return 0, fmt.Errorf("number %q", s)
	}
	whole, part, _ := strings.Cut(digits, ".")
	if whole+part == "" || strings.Trim(whole+part, "0123456789") != "" {
		return 0, fmt.Errorf("number %q", s)
	}
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		return 0, fmt.Errorf("number %q", s)
	}
	return v, nil
}

func gNumber(v float64) (int, error) {
	t := v * 10
	g := int(t + 0.5)
	if v < 0 || v > 999 || t-float64(g) > 1e-6 || float64(g)-t > 1e-6 {
		return 0, fmt.Errorf("no G%v here", v)
	}
	return g, nil
}
