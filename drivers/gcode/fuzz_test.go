package gcode

import (
	"regexp"
	"strings"
	"testing"
)

// never are words that no start line may have, written as they may stand in a line without spaces.
var never = regexp.MustCompile(`G0*(0|1|28|30|91|92)(\.0*)?([^0-9.]|$)|[MABCXYZUVW][+-]?[0-9]`)

// What spaces and the case of letters mean is nothing (RS274/NGC 3.3), so what is refused does not hang on
// them, and whatever is let through has none of the words that are never sent.
func FuzzStartLines(f *testing.F) {
	for _, s := range []string{"G21 G90 G94", "G92.1", "G54", "G 9 1", "g92 a0", "G092", "G92.", "G92.0", "G91.1", "M2", "(M2)", "N1G28", "G1A0", "T1", "G+91", "G9\t2"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, text string) {
		word := forbidden(text)
		for name, other := range map[string]string{"capitals": strings.ToUpper(text), "no spaces": strings.ReplaceAll(text, " ", ""), "more spaces": strings.ReplaceAll(text, "G", " G ")} {
			if (forbidden(other) == "") != (word == "") {
				t.Fatalf("%q has %q, and with %s %q has %q; want both or neither refused", text, word, name, other, forbidden(other))
			}
		}
		bare := strings.ToUpper(strings.NewReplacer(" ", "", "\t", "").Replace(text))
		if word == "" && never.MatchString(bare) {
			t.Fatalf("%q is let through with %q", text, never.FindString(bare))
		}
	})
}
