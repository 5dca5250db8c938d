package nighttest

import "testing"

// FuzzScript reads what somebody may copy out of a failure: what is taken is printed as something that
// is read as the same night.
func FuzzScript(f *testing.F) {
	for _, s := range []string{"kill written:3, kill 2h0m0s, hold 1h, resume 2h, stop 3h | ", "away 1h0m0s+10m0s, full 2h+1m, older 3h:2 | ", "|", "hold | x", "kill a:b:1|", "away 1h+|", "hold -1h|", "kill :1 |", "full 1h+2h+3h |"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, text string) {
		s, err := ParseScript(text)
		if err != nil {
			return
		}
		back, err := ParseScript(s.String())
		if err != nil || back.String() != s.String() {
			t.Errorf("%q is the script %q, and that is read as %q, %v", text, s, back, err)
		}
	})
}
