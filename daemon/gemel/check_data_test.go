//go:build unix

package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"gemel/daemon/logbook"
	"gemel/protocol"
)

// oldNight is a data folder with a logbook of one night in it.
func oldNight(t *testing.T) (data string) {
	t.Helper()
	data = t.TempDir()
	text, err := os.ReadFile("../../testdata/logbook/schema-2.db")
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(logbookFile(data), text, 0o644); err != nil {
		t.Fatal(err)
	}
	return data
}

// hurt changes one digit of a body: SQLite sees nothing of it.
func hurt(t *testing.T, data string) {
	t.Helper()
	text, err := os.ReadFile(logbookFile(data))
	if err != nil {
		t.Fatal(err)
	}
	changed := strings.Replace(string(text), `"mean":50.125`, `"mean":50.152`, 1)
	if changed == string(text) {
		t.Fatal("no such digits")
	}
	if err := os.WriteFile(logbookFile(data), []byte(changed), 0o644); err != nil {
		t.Fatal(err)
	}
}

// breakUp zeroes the second page, where a tree begins.
func breakUp(t *testing.T, data string) {
	t.Helper()
	f, err := os.OpenFile(logbookFile(data), os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	if _, err := f.WriteAt(make([]byte, 4096), 4096); err != nil {
		t.Fatal(err)
	}
}

func TestCheckVerifiesALogbookAndSaysWhatItLookedAt(t *testing.T) {
	data := oldNight(t)
	out := must(t, "check", "--data", data)
	for _, want := range []string{"1 run, 7 entries, 3 readings among them, 0 notes; sound.", "every body against its sum", "counts against their slices", "20310203T200000Z-k3"} {
		if !strings.Contains(out, want) {
			t.Errorf("said\n%s\nwant %q", out, want)
		}
	}
	if _, errOut, code := gemel(t, "check", "--data", t.TempDir()); code != exitFailed || !strings.Contains(errOut, "no logbook in") {
		t.Errorf("an empty folder: exit %d, %s", code, errOut)
	}
}

func TestCheckFindsADigitThatIsNotWhatWasWrittenAndRescuesTheRest(t *testing.T) {
	data := oldNight(t)
	hurt(t, data)
	_, errOut, code := gemel(t, "check", "--data", data)
	if code != exitFailed || !strings.Contains(errOut, "its sum does not hold") || !strings.Contains(errOut, "check --data "+data+" --rescue FILE") {
		t.Errorf("exit %d, %s; want the entry, and what to do", code, errOut)
	}
	out, _, code := gemel(t, "check", "--data", data, "--json")
	var got struct {
		Sound    []string
		Findings []protocol.Finding
	}
	if err := json.Unmarshal([]byte(out), &got); err != nil || code != exitFailed || len(got.Findings) != 1 || len(got.Sound) != 0 {
		t.Errorf("exit %d, %v, %+v; want one finding", code, err, got)
	}

	to := filepath.Join(t.TempDir(), "rescued.db")
	out, errOut, code = gemel(t, "check", "--data", data, "--rescue", to)
	if code != exitFailed || !strings.Contains(out, "1 run, 4 entries") || !strings.Contains(out, to+".rest.jsonl") {
		t.Errorf("exit %d\n%s%s\nwant 4 entries, and the others beside them", code, out, errOut)
	}
	b, err := logbook.OpenReadOnly(to)
	if err != nil {
		t.Fatal(err)
	}
	defer b.Close()
	if wrong := b.Verify(t.Context()); len(wrong) != 0 {
		t.Errorf("the rescued logbook: %q", wrong)
	}
	if _, errOut, code := gemel(t, "check", "--data", data, "--rescue", to); code == exitDone || !strings.Contains(errOut, "want a new name") {
		t.Errorf("over a file that is there: exit %d, %s", code, errOut)
	}
	if _, _, code := gemel(t, "check", "--rescue", to); code != exitWrongUse {
		t.Errorf("without a folder: exit %d", code)
	}
}

func TestADamagedLogbookIsNotWrittenTo(t *testing.T) {
	data := oldNight(t)
	breakUp(t, data)
	before, err := os.ReadFile(logbookFile(data))
	if err != nil {
		t.Fatal(err)
	}
	_, errOut, code := gemel(t, "serve", "--bench", demoBenchFile, "--data", data)
	if code != exitFailed || !strings.Contains(errOut, "the logbook is damaged") || !strings.Contains(errOut, "--rescue FILE") {
		t.Errorf("serve: exit %d, %s; want a refusal that says what to do", code, errOut)
	}
	if after, err := os.ReadFile(logbookFile(data)); err != nil || string(after) != string(before) {
		t.Errorf("the damaged file was changed (%v)", err)
	}
	if _, errOut, code := gemel(t, "check", "--data", data); code != exitFailed || !strings.Contains(errOut, "--rescue FILE") {
		t.Errorf("check: exit %d, %s", code, errOut)
	}
	copied := filepath.Join(t.TempDir(), "copy.db")
	if _, errOut, code := gemel(t, "export", "--data", data, "--snapshot", copied); code != exitFailed || !strings.Contains(errOut, "--rescue FILE") {
		t.Errorf("export --snapshot: exit %d, %s", code, errOut)
	}
	out, errOut, _ := gemel(t, "check", "--data", data, "--rescue", copied+".rescued", "--json")
	var got struct{ Entries int }
	if err := json.Unmarshal([]byte(out), &got); err != nil {
		t.Errorf("rescue: %v\n%s%s", err, out, errOut)
	}
}

func TestASnapshotIsASoundLogbookAndReplacesNothing(t *testing.T) {
	data, to := oldNight(t), filepath.Join(t.TempDir(), "night.db")
	if out := must(t, "export", "--data", data, "--snapshot", to); !strings.Contains(out, "1 run, 7 entries; sound.") {
		t.Errorf("said %s", out)
	}
	if _, errOut, code := gemel(t, "export", "--data", data, "--snapshot", to); code != exitWrongUse || !strings.Contains(errOut, "exists; name another file") {
		t.Errorf("again: exit %d, %s", code, errOut)
	}
	if _, _, code := gemel(t, "export", "--data", data, "--snapshot", to+"2", "--to", "x.csv"); code != exitWrongUse {
		t.Errorf("with --to: exit %d", code)
	}
}
