package nighttest

import (
	"encoding/json"
	"fmt"
	"strings"
)

// Story prints the merged time line, one line a moment: what to read when a night went wrong.
func (r *Result) Story() string {
	var b strings.Builder
	for _, m := range r.Line {
		at := m.At.UTC().Format("15:04:05.000000000")
		switch {
		case m.World != nil:
			w := *m.World
			text, _ := json.Marshal(w)
			fmt.Fprintf(&b, "%s world   %s\n", at, text)
		case m.Journal != nil:
			fmt.Fprintf(&b, "%s journal %s\n", at, m.Journal.Body)
		case m.Stream != nil:
			fmt.Fprintf(&b, "%s stream  %s\n", at, m.Stream.ID())
		case m.Process != nil:
			fmt.Fprintf(&b, "%s process %s %s\n", at, m.Process.What, m.Process.Text)
		}
	}
	return b.String()
}
