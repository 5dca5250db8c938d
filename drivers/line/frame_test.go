package line

import (
	"bytes"
	"strings"
	"testing"
)

var framers = []struct {
	name   string
	frame  Frame
	input  string
	frames []string
	rest   string
}{
	{"a line feed ends an answer", Terminated([]byte("\n")), "12\n34\n5", []string{"12", "34"}, "5"},
	{"a carriage return before it belongs to it", Terminated([]byte("\n")), "12\r\n\r\n", []string{"12", ""}, ""},
	{"a terminator of two bytes", Terminated([]byte("\r\n")), "1\n2\r\n", []string{"1\n2"}, ""},
	{"so many bytes", Exactly(3), "abcdefg", []string{"abc", "def"}, "g"},
	// IEEE 488.2, definite length arbitrary block: #15HELLO is five bytes.
	{"a block may hold the terminator", Blocks([]byte("\n")), "#15HE\nLO;7\n8\n", []string{"#15HE\nLO;7", "8"}, ""},
	{"a block inside an answer", Blocks([]byte("\n")), "1,#13\n\n\n,2\n", []string{"1,#13\n\n\n,2"}, ""},
	{"an indefinite block ends at the terminator", Blocks([]byte("\n")), "#0abc\nx\n", []string{"#0abc", "x"}, ""},
	{"a number to another base is no block", Blocks([]byte("\n")), "#H1F\n", []string{"#H1F"}, ""},
	{"a hash inside a word is no block", Blocks([]byte("\n")), "a#15\n", []string{"a#15"}, ""},
	{"a string may look like a block", Blocks([]byte("\n")), "0,\"#15 says \"\"no\"\"\"\n2\n", []string{`0,"#15 says ""no"""`, "2"}, ""},
	{"a string that never closes ends with its line", Blocks([]byte("\n")), "0,\"No err\n173\n", []string{`0,"No err`, "173"}, ""},
}

func TestFramersCutTheSameHoweverTheBytesArrive(t *testing.T) {
	for _, tc := range framers {
		for _, piece := range []int{1, 2, 3, len(tc.input)} {
			t.Run(tc.name, func(t *testing.T) {
				var rx []byte
				var got []string
				for from := 0; from < len(tc.input); from += piece {
					rx = append(rx, tc.input[from:min(from+piece, len(tc.input))]...)
					for {
						payload, size, err := tc.frame(rx)
						if err != nil {
							t.Fatalf("%q: %v", rx, err)
						}
						if size == 0 {
							break
						}
						got = append(got, string(rx[:payload]))
						rx = rx[size:]
					}
				}
				if strings.Join(got, "|") != strings.Join(tc.frames, "|") || string(rx) != tc.rest {
					t.Errorf("pieces of %d: got %q and %q left; want %q and %q", piece, got, rx, tc.frames, tc.rest)
				}
			})
		}
	}
}

func TestABlockWithALengthThatIsNoNumberIsRefused(t *testing.T) {
	if _, _, err := Blocks([]byte("\n"))([]byte("#2x1\n")); err == nil {
		t.Error("taken; want an error")
	}
}

func FuzzFramers(f *testing.F) {
	for _, tc := range framers {
		f.Add([]byte(tc.input), 1)
	}
	f.Fuzz(func(t *testing.T, input []byte, at int) {
		for _, frame := range []Frame{Terminated([]byte("\n")), Blocks([]byte("\n")), Exactly(4)} {
			before := bytes.Clone(input)
			payload, size, err := frame(input)
			if payload < 0 || payload > size || size > len(input) || !bytes.Equal(before, input) {
				t.Fatalf("%q: payload %d, size %d", input, payload, size)
			}
			if err != nil || size == 0 {
				continue
			}
			// A whole frame must not become another one by what follows it.
			p2, s2, err := frame(append(bytes.Clone(input[:size]), "tail\n"...))
			if p2 != payload || s2 != size || err != nil {
				t.Fatalf("%q: cut at %d/%d alone and at %d/%d with more behind it", input, payload, size, p2, s2)
			}
		}
	})
}
