package strict

import (
	"cmp"
	"fmt"
	"slices"
	"strings"

	"gemel/protocol"
)

// maxFindings bounds what one file can make a terminal or a message carry. One more says how many
// there are beyond.
const maxFindings = 100

// Error is everything that is wrong with a file, sorted by position.
type Error struct {
	Findings []protocol.Finding
}

// Error prints one finding a line.
func (e *Error) Error() string {
	lines := make([]string, len(e.Findings))
	for i, f := range e.Findings {
		lines[i] = f.String()
	}
	return strings.Join(lines, "\n")
}

// Join makes one error of findings, sorted and each only once; nil if there are none.
func Join(findings ...protocol.Finding) error { return join(findings, 0) }

// join adds that there are more than those given.
func join(findings []protocol.Finding, more int) error {
	if len(findings) == 0 {
		return nil
	}
	sorted := slices.Clone(findings)
	slices.SortStableFunc(sorted, func(a, b protocol.Finding) int {
		return cmp.Or(cmp.Compare(a.File, b.File), cmp.Compare(a.Line, b.Line), cmp.Compare(a.Col, b.Col))
	})
	sorted = slices.Compact(sorted)
	if beyond := len(sorted) - maxFindings; beyond > 0 {
		sorted, more = sorted[:maxFindings], more+beyond
	}
	if more > 0 {
		last := sorted[len(sorted)-1]
		sorted = append(sorted, protocol.Finding{File: last.File, Line: last.Line, Col: last.Col,
			Found: fmt.Sprintf("%d more findings", more), Want: "the ones above mended first"})
	}
	return &Error{Findings: sorted}
}
