package logbook

import (
	"bufio"
	"bytes"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"unicode"

	"gemel/protocol"
)

// FuzzExport writes names that people and instruments may give into a table. Every row has every
// column, no name ends a comment or a row, and what is read from the table is what was written.
func FuzzExport(f *testing.F) {
	f.Add("a night", "pump low", "pump_power", "mW")
	f.Add("a\nb\r\n# c", `"quoted", with a comma`, "s\x00e\u2028nsor", "")
	f.Add("=1+1", "-", "=cmd", "\xff")
	b, err := Open(f.TempDir())
	if err != nil {
		f.Fatal(err)
	}
	f.Cleanup(func() { _ = b.Close() })
	runs := 0
	f.Fuzz(func(t *testing.T, title, reason, sensor, unitName string) {
		runs++
		h := header(protocol.RunID(fmt.Sprintf("20310203T200000Z-f%d", runs)), "")
		h.Title = title
		if _, err := b.NewRun(t.Context(), h, event(h.Run, 1, protocol.OperatorDid, protocol.Queued, "asked for")); err != nil {
			return // refused, which other tests look at
		}
		hd := head(protocol.ReadingSchema, h.Run, 2)
		r := protocol.Reading{Head: hd, Kind: protocol.Dark, Reason: reason, Attempt: 1, StartedAt: hd.At, EndedAt: hd.At, Sensors: []protocol.Sensor{{Sensor: sensor, Unit: unitName, Samples: 1}}}
		if err := b.Append(t.Context(), entry(protocol.ReadingEntry, hd, r)); err != nil {
			return
		}
		var out bytes.Buffer
		if err := b.Export(t.Context(), h.Run, &out); err != nil {
			t.Fatal(err)
		}
		lines := bufio.NewReader(&out)
		comments := 0
		for {
			if start, err := lines.Peek(2); err != nil || string(start) != "# " {
				break
			}
			line, err := lines.ReadString('\n')
			if err != nil || strings.ContainsFunc(strings.TrimSuffix(line, "\r\n"), unicode.IsControl) {
				t.Fatalf("the comment %q, %v; want one line", line, err)
			}
			comments++
		}
		rows, err := csv.NewReader(lines).ReadAll()
		if err != nil || len(rows) != 2 {
			t.Fatalf("%d rows, %v; want the names and one reading", len(rows), err)
		}
		if comments != 7+len(rows[0]) {
			t.Errorf("%d comments for %d columns; want 7 more", comments, len(rows[0]))
		}
		for i, name := range rows[0] {
			want := map[string]string{"reason": reason, "kind": "dark"}[name]
			if want != "" && rows[1][i] != asRead(want) {
				t.Errorf("column %s says %q; want %q", name, rows[1][i], asRead(want))
			}
		}
		if name := rows[0][len(rows[0])-4]; name != asRead(sensor+".minimum") {
			t.Errorf("the sensor %q has the column %q", sensor, name)
		}
	})
}

// asRead is a text after JSON, which has no bytes that are not UTF-8, and after a table, in which a
// line end is one.
func asRead(text string) string {
	body, _ := json.Marshal(text)
	_ = json.Unmarshal(body, &text)
	return strings.ReplaceAll(text, "\r\n", "\n")
}

// FuzzOwed reads whatever may stand on the page of stops that are owed. It is read whole or refused,
// and what is read can be written again.
func FuzzOwed(f *testing.F) {
	for _, s := range []string{``, ` `, `[]`, `null`, `[{"run":"r1","who":"ann"}]`, `[{"run":"../x"}]`, `[{}]`, `{}`, `[{"run":"r1"}`, "[]\x00"} {
		f.Add([]byte(s))
	}
	b, err := Open(f.TempDir())
	if err != nil {
		f.Fatal(err)
	}
	f.Cleanup(func() { _ = b.Close() })
	f.Fuzz(func(t *testing.T, text []byte) {
		if err := os.WriteFile(filepath.Join(filepath.Dir(b.file), owedName), text, 0o600); err != nil {
			t.Fatal(err)
		}
		stops, err := b.Owed()
		if err != nil {
			if stops != nil || !strings.HasPrefix(err.Error(), owedName+": ") {
				t.Errorf("%q: %v, %v; want a refusal that names the file", text, stops, err)
			}
			return
		}
		if err := b.Owe(stops); err != nil {
			return // too many for the page
		}
		back, err := b.Owed()
		if err != nil || len(back) != len(stops) || len(stops) > 0 && !reflect.DeepEqual(back, stops) {
			t.Errorf("%q is %v, and written again %v, %v", text, stops, back, err)
		}
	})
}
