package strict

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// read walks a small invented format that uses every getter.
func read(text string) (*Doc, map[string]any) {
	d := Parse("f.yaml", []byte(text))
	m := d.Root()
	got := map[string]any{
		"text":   m.Opt("text").Text(),
		"name":   m.Opt("name").Token(),
		"pick":   m.Opt("pick").Choice([]string{"rising", "falling"}),
		"flag":   m.Opt("flag").Bool(),
		"count":  m.Opt("count").Int(0, 1_000_000),
		"ratio":  m.Opt("ratio").Number(-10, 10),
		"angle":  m.Opt("angle").Angle(-10*unit.Degree, 10*unit.Degree),
		"time":   m.Opt("time").Duration(0, time.Hour),
		"power":  m.Opt("power").Quantity(unit.Power, 0, 1),
		"share":  m.Opt("share").Quantity(unit.Share, 0, 1),
		"dead":   m.Opt("dead").Measured(unit.Time, 0, 1),
		"temp":   m.Opt("temp").Measured(unit.Temperature, -100, 100),
		"any":    m.Opt("any").Any(),
		"wire":   m.Opt("wire").Wire(),
		"ranges": len(m.Opt("ranges").List(1, 3)),
	}
	if u := m.Opt("unit"); u.Given() {
		got["unit"], _ = u.Unit()
	}
	for _, e := range m.Opt("things").Map().Entries() {
		sub := e.Value.Map()
		sub.Need("size").Int(1, 3)
		sub.Later("soon")
		sub.Done()
	}
	m.Done()
	return d, got
}

func TestWhatIsWellWrittenIsRead(t *testing.T) {
	d, got := read(strings.Join([]string{
		`text: "a: b"`, `name: signal_arm`, `pick: rising`, `flag: true`, `count: 12`, `ratio: -2.5`, `angle: 30 arcmin`,
		`time: 1.5 s`, `power: 50 mW`, `share: 65 %`, `dead: {value: 4.0 ns, u: 0.5 ns, from: "delay scan 2031-02-03"}`,
		`temp: {value: 20 Cel, u: 0.2 K}`, `any: 2.50 ns`, `wire: ""`, `ranges: [1, 2]`, `unit: mW`, `things: {a: {size: 1}, b-2: {size: 3}}`, "",
	}, "\n"))
	if err := d.Err(); err != nil {
		t.Fatal(err)
	}
	want := map[string]any{
		"text": "a: b", "name": "signal_arm", "pick": "rising", "flag": true, "count": int64(12), "ratio": -2.5, "angle": 30 * unit.Arcminute,
		"time": 1500 * time.Millisecond, "power": 0.05, "share": 0.65, "dead": Measured{4e-9, 0.5e-9, "delay scan 2031-02-03"},
		"temp": Measured{20, 0.2, ""}, "any": Quantity{"2.50", "ns", unit.Time, 2.5e-9}, "wire": "", "ranges": 2, "unit": "mW",
	}
	for key, w := range want {
		if got[key] != w {
			t.Errorf("%s: read %#v; want %#v", key, got[key], w)
		}
	}
}

func TestWhatIsBadlyWrittenIsRefusedWithItsPlace(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"a plain number has no unit", "time: 5\n", `f.yaml:1:7: time: 5 has no unit; want a time such as "2 s"`},
		{"an angle has no unit", "angle: 0.05\n", `f.yaml:1:8: angle: 0.05 has no unit; want an angle such as "1.5 deg"`},
		{"a unit is of another kind", "time: 5 deg\n", `f.yaml:1:7: time: "5 deg"; want a time in ps, ns, us, ms, s, min, h`},
		{"an angle in seconds", "angle: 5 s\n", `f.yaml:1:8: angle: unit "s"; want an angle in deg, mrad, arcmin or arcsec`},
		{"a unit is unknown", "any: 5 kg\n", `f.yaml:1:6: any: unknown unit "kg"; want a unit such as deg, s, ms, nm, mm, mW, kHz, Cel, %`},
		{"a number looks octal", "count: 010\n", `f.yaml:1:8: count: 010; want a whole number from 0 to 1000000`},
		{"a number is hexadecimal", "count: 0x10\n", `f.yaml:1:8: count: 0x10; want a whole number from 0 to 1000000`},
		{"a number has underscores", "count: 1_0\n", `f.yaml:1:8: count: 1_0; want a whole number from 0 to 1000000`},
		{"a whole number has a point", "count: 9600.0\n", `f.yaml:1:8: count: 9600.0; want a whole number from 0 to 1000000`},
		{"a number is none", "ratio: .nan\n", `f.yaml:1:8: ratio: .nan; want a number from -10 to 10`},
		{"a number is infinite", "ratio: .inf\n", `f.yaml:1:8: ratio: .inf; want a number from -10 to 10`},
		{"a number is quoted", "count: \"5\"\n", `f.yaml:1:8: count: "5"; want a whole number from 0 to 1000000`},
		{"an old truth value", "flag: yes\n", `f.yaml:1:7: flag: "yes"; want true or false`},
		{"a truth value in capitals", "flag: True\n", `f.yaml:1:7: flag: True; want true or false`},
		{"a value is empty", "text:\n", `f.yaml:1:1: text: nothing; want text`},
		{"a value is null", "count: ~\n", `f.yaml:1:1: count: nothing; want a whole number from 0 to 1000000`},
		{"text is a number", "text: 12\n", `f.yaml:1:7: text: 12; want text: write it in quotes, "12"`},
		{"text is a date", "text: 2031-02-03\n", `f.yaml:1:7: text: 2031-02-03; want text: write it in quotes, "2031-02-03"`},
		{"a list stands for one value", "text: [a]\n", `f.yaml:1:7: text: a list; want text`},
		{"one value stands for a list", "ranges: a\n", `f.yaml:1:9: ranges: "a"; want a list, such as [a, b]`},
		{"a list is too long", "ranges: [1, 2, 3, 4]\n", `f.yaml:1:9: ranges: a list of 4; want 1 to 3 in it`},
		{"one value stands for keys", "things: 4\n", `f.yaml:1:9: things: 4; want keys and values`},
		{"a key is unknown", "tim: 5 s\n", `f.yaml:1:1: tim: an unknown key; want "time", which is nearest (all: `},
		{"a key is twice", "count: 1\ncount: 2\n", `f.yaml:2:1: count: the key a second time (first on line 1); want each key once`},
		{"a key is missing", "things:\n  a: {}\n", `f.yaml:2:3: things.a.size: missing; want this key written`},
		{"a key is for later", "things:\n  a: {size: 1, soon: 2}\n", `f.yaml:2:16: things.a.soon: not available yet; want no such key in this version`},
		{"a name is no token", "things:\n  a.b: {size: 1}\n", `f.yaml:2:3: things.a.b: the name "a.b"; want letters`},
		{"a word is nearly allowed", "pick: risng\n", `f.yaml:1:7: pick: "risng"; want "rising", which is nearest, of "rising", "falling"`},
		{"an anchor", "count: &a 1\n", `f.yaml:1:8: count: the anchor "&a"; want no anchors and no aliases`},
		{"an alias to nothing", "name: *a\n", `f.yaml:1:1: unknown anchor 'a' referenced; want YAML`},
		{"a merge key", "things: {<<: {a: 1}}\n", `f.yaml:1:10: things.<<: the merge key "<<"; want the keys themselves, written out`},
		{"a tag", "count: !!str 5\n", `f.yaml:1:8: count: the tag "!!str"; want no tags`},
		{"a list as a key", "? [a]\n: b\n", `f.yaml:1:3: a list as a key; want a name`},
		{"two documents", "count: 1\n---\ncount: 2\n", `f.yaml:2:1: a second document; want one document a file, without "---" in it`},
		{"nothing at all", "", `f.yaml:1:1: an empty file; want keys and values`},
		{"comments only", "# nothing\n", `f.yaml:1:1: an empty file; want keys and values`},
		{"a list at the top", "- 1\n", `f.yaml:1:1: a list; want keys and values, such as "title: …"`},
		{"a tab for indentation", "things:\n\ta: 1\n", `f.yaml:2:1: a tab in the indentation; want spaces`},
		{"no UTF-8", "text: a\nname: \xff\n", `f.yaml:2:7: bytes that are not UTF-8; want UTF-8 text`},
		{"a value out of range", "power: 5 W\n", `f.yaml:1:8: power: "5 W"; want 0 W to 1 W`},
		{"a share above one", "share: 65\n", `f.yaml:1:8: share: 65; want a number from 0 to 1`},
		{"too deep", strings.Repeat("{a: ", 40) + strings.Repeat("}", 40) + "\n", `values nested more than 24 deep; want flatter keys`},
		{"too many values", "ranges: [" + strings.Repeat("1,", maxNodes) + "]\n", `more than 100000 values; want fewer`},
		{"too many bytes", "# " + strings.Repeat("a", MaxBytes), `f.yaml: a file of 1048578 bytes; want at most 1048576 bytes (1 MiB)`},
	} {
		t.Run(c.name, func(t *testing.T) {
			d, _ := read(c.text)
			err := d.Err()
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("got  %v\nwant %s", err, c.want)
			}
			if e, ok := errors.AsType[*Error](err); !ok || len(e.Findings) != 1 {
				t.Errorf("%v; want exactly one finding", err)
			}
		})
	}
}

func TestAllFindingsComeAtOnceInTheOrderOfTheFile(t *testing.T) {
	d, _ := read("flag: yes\nbogus: 1\ntime: 5\nthings:\n  a: {soon: 1}\ncount: 1\ncount: 2\nname: &x y\n")
	var lines []int
	for _, f := range d.Err().(*Error).Findings {
		lines = append(lines, f.Line)
	}
	want := []int{1, 2, 3, 5, 5, 7, 8}
	if len(lines) != len(want) {
		t.Fatalf("lines %v; want %v\n%v", lines, want, d.Err())
	}
	for i := range want {
		if lines[i] != want[i] {
			t.Fatalf("lines %v; want %v", lines, want)
		}
	}
}

func TestAnAliasBombIsRefusedWithoutBeingExpanded(t *testing.T) {
	var b strings.Builder
	b.WriteString("a0: &a0 [x, x, x, x, x, x, x, x, x, x]\n")
	for i := 1; i < 10; i++ {
		prev := string(rune('0' + i - 1))
		b.WriteString("a" + string(rune('0'+i)) + ": &a" + string(rune('0'+i)) + " [" + strings.Repeat("*a"+prev+", ", 9) + "*a" + prev + "]\n")
	}
	d, _ := read(b.String())
	if err := d.Err(); err == nil || !strings.Contains(err.Error(), "the alias") {
		t.Fatalf("got %v; want the aliases refused", err)
	}
}

func TestAHostileFileGetsAHundredFindingsAndTheirNumber(t *testing.T) {
	var unknown, entries strings.Builder
	entries.WriteString("things:\n")
	n := 0
	for ; unknown.Len() < MaxBytes*9/10 && n < maxNodes-10; n++ {
		fmt.Fprintf(&unknown, "nam%d: 1\n", n)
		fmt.Fprintf(&entries, " a%d: 1\n", n)
	}
	for name, text := range map[string]string{"keys that nobody knows": unknown.String(), "names without what they need": entries.String()} {
		d, _ := read(text)
		e, ok := errors.AsType[*Error](d.Err())
		if !ok || len(e.Findings) != maxFindings+1 {
			t.Fatalf("%s: %d findings; want %d", name, len(e.Findings), maxFindings+1)
		}
		last := e.Findings[maxFindings]
		if want := fmt.Sprintf("%d more findings", n-maxFindings); last.Found != want || last.Line != e.Findings[maxFindings-1].Line {
			t.Errorf("%s: the last says %q on line %d; want %q on line %d", name, last.Found, last.Line, want, e.Findings[maxFindings-1].Line)
		}
	}
}

func TestALargeFileIsRefusedByItsSize(t *testing.T) {
	path := filepath.Join(t.TempDir(), "large.yaml")
	f, err := os.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	if err := f.Truncate(2 << 20); err != nil {
		t.Fatal(err)
	}
	f.Close()
	_, err = ReadFile(path)
	if _, ok := errors.AsType[*Error](err); !ok || !strings.Contains(err.Error(), "2097152 bytes") {
		t.Fatalf("got %v; want a refusal that names the size", err)
	}
}

func TestAFileThatIsNotThereIsAnotherErrorThanABadOne(t *testing.T) {
	_, err := ReadFile(filepath.Join(t.TempDir(), "none.yaml"))
	if !errors.Is(err, os.ErrNotExist) {
		t.Fatalf("got %v; want os.ErrNotExist", err)
	}
}

func TestTheNearestWordIsOneThatMayHaveBeenMeant(t *testing.T) {
	words := []string{"tolerance", "settle", "home", "park"}
	for found, want := range map[string]string{"tolerence": "tolerance", "setle": "settle", "hoem": "home", "Park": "park", "wavelength": ""} {
		if got := Nearest(found, words); got != want {
			t.Errorf("nearest to %q is %q; want %q", found, got, want)
		}
	}
}

func FuzzParse(f *testing.F) {
	for _, s := range []string{"time: 5 s\n", "things: {a: {size: 1}}\n", "a: &b [*b]\n", "? [a]\n: b\n", "count: 1\n---\n", "text: |\n  a\n", "<<: {a: 1}\n", "%YAML 1.1\n---\na: 1\n", "dead: {value: 1 ns, u: 2 ns}\n", "\ufeffa: 1\n"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, text string) {
		d, got := read(text)
		err := d.Err()
		if err == nil {
			if !d.Readable() {
				t.Fatal("accepted a file that cannot be read")
			}
			if again, second := read(text); again.Err() != nil || second["time"] != got["time"] {
				t.Fatal("read differently the second time")
			}
			return
		}
		e, ok := errors.AsType[*Error](err)
		if !ok || len(e.Findings) == 0 || len(e.Findings) > maxFindings+1 {
			t.Fatalf("%v; want 1 to %d findings", err, maxFindings+1)
		}
		var last protocol.Finding
		for _, x := range e.Findings {
			if x.Found == "" || x.Want == "" || x.Line < last.Line {
				t.Fatalf("finding %+v after %+v", x, last)
			}
			last = x
		}
	})
}
