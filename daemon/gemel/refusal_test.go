//go:build unix

package main

import (
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"syscall"
	"testing"
)

// refused is one mistake of a file, and what the one error has to say about it.
type refused struct {
	name   string
	bench  []change
	recipe string
	where  string   // what the error begins with, a regular expression for file:line:column
	says   []string // what was found, and what is allowed
}

const soundRecipe = "title: Sound\nsweep: [{axis: signal_arm, from: 1 deg, to: 2 deg, step: 0.5 deg}]\ndwell: 20 ms\n"

func aliasBomb() string {
	var b strings.Builder
	b.WriteString("title: &a [x, x, x, x, x, x, x, x, x]\n")
	for c := 'b'; c <= 'i'; c++ {
		fmt.Fprintf(&b, "%c: &%c [%s]\n", c, c, strings.TrimSuffix(strings.Repeat(fmt.Sprintf("*%c, ", c-1), 9), ", "))
	}
	return b.String()
}

func mistakes() []refused {
	return []refused{
		{"an angle beyond a soft limit", nil, strings.Replace(soundRecipe, "to: 2 deg", "to: 20 deg", 1), `r\.yaml:2:\d+: `, []string{"20 deg", "12 deg"}},
		{"two axes on one letter", []change{{"letter: B", "letter: A"}}, soundRecipe, `quick-bench\.yaml:\d+:\d+: `, []string{"letter", `"?A"?`, "want"}},
		{"a recipe of 10^9 points", nil, "title: Much\nsweep:\n  - {axis: signal_arm, from: 0 deg, to: 10 deg, step: 0.0003125 deg}\n  - {axis: idler_arm, from: 0 deg, to: 10 deg, step: 0.0003125 deg}\ndwell: 20 ms\n", `r\.yaml:\d+:\d+: `, []string{"1024064001|32001", "want"}},
		{"a sweep with a negative step", nil, strings.Replace(soundRecipe, "step: 0.5", "step: -0.5", 1), `r\.yaml:2:\d+: `, []string{"-0.5 deg", "want"}},
		{"a file of 2 MB", nil, soundRecipe + strings.Repeat("# a long story\n", 2<<20/15), `r\.yaml`, []string{"209\\d{4} bytes|2\\.\\d+ M|larger|more than", "want|most|than"}},
		{"an alias bomb", nil, aliasBomb(), `r\.yaml:\d+:\d+: `, []string{"alias|anchor", "want"}},
		{"an unknown key", nil, strings.Replace(soundRecipe, "dwell:", "dwel:", 1), `r\.yaml:3:1: `, []string{"dwel", `"?dwell"?`}},
		{"a missing unit", nil, strings.Replace(soundRecipe, "dwell: 20 ms", "dwell: 20", 1), `r\.yaml:3:8: `, []string{"dwell", "20", "unit", "want"}},
		{"an unknown key in the bench file", []change{{`^    tolerance: 0.01 deg`, "    tolerence: 0.01 deg"}}, soundRecipe, `quick-bench\.yaml:\d+:5: `, []string{"tolerence", "tolerance"}},
		{"a missing unit in the bench file", []change{{`^    tolerance: 0.01 deg`, "    tolerance: 0.01"}}, soundRecipe, `quick-bench\.yaml:\d+:\d+: `, []string{"0.01", "unit", "want"}},
	}
}

// Each mistake is one clear error; nothing moves, and nothing is written, be it run, served or
// started on a serving daemon.
func TestAMistakeInAFileIsOneClearErrorAndMovesAndWritesNothing(t *testing.T) {
	dir := t.TempDir()
	lines := filepath.Join(dir, "lines")
	sound := quick(t, dir)
	sim, ledger := simulate(t, sound, lines, "")
	served := filepath.Join(dir, "served")
	if _, ok := serve(t, nil, "--bench", sound, "--data", served, "--lines", lines); !ok {
		t.Fatal("serve ended")
	}
	for _, m := range mistakes() {
		t.Run(m.name, func(t *testing.T) {
			dir := t.TempDir()
			file := quick(t, dir, m.bench...)
			recipe := writeFile(t, filepath.Join(dir, "r.yaml"), m.recipe)
			data := filepath.Join(dir, "data")
			_, errOut, code := gemel(t, "run", "--bench", file, "--recipe", recipe, "--data", data, "--lines", lines)
			m.check(t, errOut, code)
			if _, err := os.Stat(data); err == nil {
				t.Errorf("%s was made", data)
			}
			_, checked, code := gemel(t, "check", "--bench", file, "--recipe", recipe)
			m.check(t, checked, code)
			if len(m.bench) == 0 && !testing.Short() {
				before := tree(t, served)
				_, errOut, code := gemel(t, "start", "--recipe", recipe, "--data", served)
				at := m
				at.where = strings.Replace(at.where, `r\.yaml`, `(^recipe|r\.yaml)`, 1)
				at.check(t, errOut, code)
				if after := tree(t, served); after["logbook.db"] != before["logbook.db"] {
					t.Error("a refused start changed the logbook")
				}
			}
		})
	}
	quit(t, sim)
	<-ledger.done
	if m := moved(ledger.all(t)); len(m) > 0 {
		t.Errorf("moved or lit for refused files: %v", m)
	}
}

func (m refused) check(t *testing.T, errOut string, code int) {
	t.Helper()
	if code != exitFailed && code != exitWrongUse {
		t.Errorf("exit code %d; want 1 or 2\n%s", code, errOut)
	}
	var found []string
	for line := range strings.Lines(errOut) {
		if regexp.MustCompile(m.where).MatchString(line) {
			found = append(found, strings.TrimSpace(line))
		}
	}
	if len(found) > 1 && m.name == "an alias bomb" {
		found = found[1:2] // each anchor and each alias is named, and nothing is expanded
	}
	if len(found) != 1 {
		t.Errorf("%d errors at %s; want one clear one\n%s", len(found), m.where, errOut)
		return
	}
	for _, says := range m.says {
		if !regexp.MustCompile(says).MatchString(found[0]) {
			t.Errorf("%q does not say %s", found[0], says)
		}
	}
	t.Log(found[0])
}

// tree is what a folder holds: by path, size and time of the last change.
func tree(t *testing.T, dir string) map[string]string {
	t.Helper()
	all := map[string]string{}
	err := filepath.WalkDir(dir, func(path string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		info, err := d.Info()
		if err != nil {
			return err
		}
		name, _ := filepath.Rel(dir, path)
		all[name] = fmt.Sprintf("%d %s", info.Size(), info.ModTime())
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return all
}

func TestASecondDaemonOnTheSameDataFolderIsRefused(t *testing.T) {
	dir := t.TempDir()
	data := filepath.Join(dir, "data")
	first, ok := serve(t, nil, "--bench", demoBenchFile, "--data", data)
	if !ok {
		t.Fatalf("serve: %s", first.err)
	}
	before := must(t, "status", "--data", data, "--json")
	contact, err := os.ReadFile(filepath.Join(data, "contact.json"))
	if err != nil {
		t.Fatal(err)
	}
	for _, args := range [][]string{{"serve"}, {"run", "--recipe", demoRecipeFile}} {
		_, errOut, code := gemel(t, append(args, "--bench", demoBenchFile, "--data", data)...)
		if code != exitFailed || !strings.Contains(errOut, data) || !strings.Contains(errOut, "one daemon a data folder") {
			t.Errorf("%s: exit code %d, %q; want 1, the folder's name and the rule", args[0], code, errOut)
		}
		t.Log(strings.TrimSpace(errOut))
	}
	if now, err := os.ReadFile(filepath.Join(data, "contact.json")); err != nil || string(now) != string(contact) {
		t.Errorf("the contact file is %s, %v; want it as it was", now, err)
	}
	if after := must(t, "status", "--data", data, "--json"); after != before {
		t.Errorf("the first daemon says %s; it said %s", after, before)
	}
}

// These are faults of the lab, not of a file: the data folder is made, and no run is in it.
func TestADeviceThatIsHeldOrAnotherIsRefusedBeforeAnythingMoves(t *testing.T) {
	for _, c := range []struct {
		name  string
		spoil func(t *testing.T, lines string)
		says  []string
	}{
		{"a device that another program holds", func(t *testing.T, lines string) {
			f, err := os.OpenFile(filepath.Join(lines, "counter"), os.O_RDWR|syscall.O_NOCTTY, 0)
			if err != nil {
				t.Fatal(err)
			}
			t.Cleanup(func() { _ = f.Close() })
			if err := syscall.Flock(int(f.Fd()), syscall.LOCK_EX); err != nil {
				t.Fatal(err)
			}
		}, []string{"counter", "held by another program"}},
		{"another instrument at the device's path", func(t *testing.T, lines string) {
			swap(t, filepath.Join(lines, "pump_shutter"), filepath.Join(lines, "counter"))
		}, []string{`shutter: identity: "Skerry Workshop,counter,3,2.0" answers; want "Skerry Workshop,shutter,8,1.1"`, `counter: identity: "Skerry Workshop,shutter,8,1.1" answers; want "Skerry Workshop,counter,3,2.0"`}},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := t.TempDir()
			lines, data := filepath.Join(dir, "lines"), filepath.Join(dir, "data")
			bench := quick(t, dir)
			sim, ledger := simulate(t, bench, lines, "")
			c.spoil(t, lines)
			p := launch(t, nil, "run", "--bench", bench, "--recipe", writeFile(t, filepath.Join(dir, "r.yaml"), soundRecipe), "--data", data, "--lines", lines)
			if code := p.wait(); code != exitFailed {
				t.Errorf("exit code %d; want 1", code)
			}
			errOut := p.err.String()
			for _, says := range c.says {
				if !regexp.MustCompile(says).MatchString(errOut) {
					t.Errorf("%q does not say %s", errOut, says)
				}
			}
			t.Log(strings.TrimSpace(errOut))
			if out, errOut, code := gemel(t, "export", "--data", data); code != exitFailed || !strings.Contains(errOut, "no run") {
				t.Errorf("export: %d %s%s; want no run in the logbook", code, out, errOut)
			}
			quit(t, sim)
			<-ledger.done
			if m := moved(ledger.all(t)); len(m) > 0 {
				t.Errorf("moved or lit: %v", m)
			}
		})
	}
}

func swap(t *testing.T, a, b string) {
	t.Helper()
	for _, step := range [][2]string{{a, a + ".held"}, {b, a}, {a + ".held", b}} {
		if err := os.Rename(step[0], step[1]); err != nil {
			t.Fatal(err)
		}
	}
}
