package drivertest

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

func TestPlaybackFailsIfSomethingElseIsSentOrSomethingIsLeft(t *testing.T) {
	steps, err := Parse("# a comment\n< HELLO\\n\n> A\\n\n< \"a\";1\\r\\n\n> \\x03\n")
	if err != nil || len(steps) != 4 {
		t.Fatalf("%v, %v", steps, err)
	}
	if again, err := Parse(Format(steps)); err != nil || len(again) != 4 || string(again[1].Text) != "A\n" || string(again[2].Text) != "\"a\";1\r\n" {
		t.Errorf("written and read again: %v, %v", again, err)
	}
	for _, tc := range []struct{ name, sent, want string }{
		{"everything", "A\n\x03", ""},
		{"less", "A\n", "left over"},
		{"half", "A\n", "left over"},
		{"something else", "B\n", "want \"A\\n\""},
		{"more", "A\n\x03X", "after the end"},
	} {
		p := Play(steps)
		for _, b := range []byte(tc.sent) {
			_, _ = p.Write([]byte{b})
		}
		err := p.Close()
		if (tc.want == "") != (err == nil) || err != nil && !strings.Contains(err.Error(), tc.want) {
			t.Errorf("%s: %v; want %q", tc.name, err, tc.want)
		}
	}
	if _, err := Parse("A\n"); err == nil {
		t.Error("a line without a direction: taken")
	}
}

func TestWhatIsRecordedCanBePlayed(t *testing.T) {
	near, far := Cable()
	r := Record(near)
	_, _ = r.Write([]byte("A"))
	_, _ = r.Write([]byte("SK\n"))
	_, _ = far.Write([]byte("yes\nno"))
	b := make([]byte, 10)
	_ = r.SetReadDeadline(time.Now().Add(time.Second))
	if n, err := r.Read(b); n != 6 || err != nil {
		t.Fatal(n, err)
	}
	if got := Format(r.Steps()); got != "> ASK\\n\n< yes\\n\n< no\n" {
		t.Errorf("recorded:\n%s", got)
	}
	_ = r.Close()
}

func TestEveryExchangeFileIsReadableAndNamesItsSource(t *testing.T) {
	files, err := filepath.Glob("../../testdata/wire/*.txt")
	if err != nil || len(files) == 0 {
		t.Fatalf("%d files, %v", len(files), err)
	}
	for _, file := range files {
		text, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		steps, err := Parse(string(text))
		if err != nil || len(steps) < 2 {
			t.Errorf("%s: %d steps, %v", file, len(steps), err)
		}
		if !strings.Contains(string(text), "ources:") && !strings.Contains(string(text), "declared by its user") {
			t.Errorf("%s names no source", file)
		}
	}
}
