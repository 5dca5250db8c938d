// Package daemon_test holds the rules of the house that no compiler knows.
package daemon_test

import (
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

// arrows is a statement of policy: for each room, what of this module it may import, tests
// included unless the room is marked. A room not listed here is an error, so that a new one is
// thought about. "sim/*" stands for every room below.
var arrows = map[string][]string{
	"protocol/unit":   {},
	"protocol":        {"protocol/unit"},
	"protocol/client": {"protocol", "protocol/unit"},
	"protocol/strict": {"protocol", "protocol/unit"},

	// The physics knows nobody. Virtual instruments never meet drivers: each is written from the
	// standard, and they meet on the wire only.
	"sim/crystal":     {"protocol/unit"},
	"sim/phasematch":  {"protocol/unit", "sim/crystal"},
	"sim/source":      {"protocol/unit", "sim/crystal", "sim/phasematch"},
	"sim/trouble":     {"protocol/unit"},
	"sim/instruments": {"protocol/unit", "sim/crystal", "sim/phasematch", "sim/source", "sim/trouble"},

	"drivers":            {"protocol/unit"},
	"drivers/line":       {"protocol/unit", "drivers", "drivers/drivertest"},
	"drivers/scpi":       {"protocol/unit", "drivers", "drivers/line", "drivers/drivertest"},
	"drivers/gcode":      {"protocol/unit", "drivers", "drivers/line", "drivers/custom", "drivers/drivertest"},
	"drivers/custom":     {"protocol/unit", "drivers", "drivers/line", "drivers/drivertest"},
	"drivers/drivertest": {"protocol/unit", "drivers"},

	// The engine knows hardware by interfaces and the logbook by one method. The pure model may be
	// used by what plans and judges, instruments and trouble may not.
	"scan":          {"protocol", "protocol/unit", "drivers"},
	"scan/recipe":   {"protocol", "protocol/unit", "protocol/strict", "drivers", "scan", "scan/route", "sim/crystal", "sim/phasematch"},
	"scan/route":    {"protocol", "protocol/unit", "drivers", "scan", "sim/crystal", "sim/phasematch"},
	"scan/estimate": {"protocol", "protocol/unit", "drivers", "scan", "sim/crystal", "sim/phasematch", "sim/source"},
	"scan/engine":   {"protocol", "protocol/unit", "drivers", "scan", "scan/route"},
	"scan/forecast": {"protocol", "protocol/unit", "drivers", "scan", "scan/route", "scan/engine", "scan/estimate", "sim/crystal", "sim/phasematch", "sim/source"},

	"daemon":           {},
	"daemon/crew":      {},
	"daemon/logbook":   {"protocol", "protocol/unit", "scan"},
	"daemon/broker":    {"protocol", "protocol/client"},
	"daemon/courier":   {"protocol", "protocol/client", "daemon/broker"},
	"daemon/remote":    {"protocol", "protocol/unit", "protocol/client", "daemon/broker", "daemon/courier"},
	"daemon/keeper":    {"protocol", "protocol/unit", "protocol/strict", "drivers", "scan", "scan/engine", "daemon/logbook"},
	"daemon/report":    {"protocol", "protocol/unit", "protocol/strict", "drivers", "scan", "scan/recipe", "scan/route", "scan/engine", "scan/estimate", "scan/forecast", "sim/crystal", "sim/phasematch", "sim/source", "daemon/bench", "daemon/logbook"},
	"daemon/bench":     {"*"},
	"daemon/nighttest": {"*"},
	"daemon/gemel":     {"*"},
}

// outside says which rooms alone may import a module from outside; the reason is the sentence.
var outside = map[string]struct {
	rooms  []string
	reason string
}{
	"go.bug.st/serial":   {[]string{"drivers/line"}, "one goroutine owns a port; a second importer could write to a closed one"},
	"modernc.org/sqlite": {[]string{"daemon/logbook"}, "the journal has one door"},
	"github.com/nats-io": {[]string{"protocol/client", "daemon/broker", "daemon/courier", "daemon/remote", "daemon/gemel"}, "the engine must run with the network away"},
	"gopkg.in/yaml.v3":   {[]string{"protocol/strict"}, "every file of a person or a stranger goes through the strict reader"},
}

type source struct {
	file string // from the module's root, with slashes
	room string
	test bool
	tree *ast.File
	pos  *token.FileSet
}

func sources(t *testing.T) []source {
	t.Helper()
	var all []source
	err := filepath.WalkDir("..", func(file string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		if d.IsDir() && strings.HasPrefix(d.Name(), ".") && d.Name() != ".." {
			return filepath.SkipDir
		}
		if d.IsDir() || !strings.HasSuffix(file, ".go") {
			return nil
		}
		set := token.NewFileSet()
		tree, err := parser.ParseFile(set, file, nil, parser.ParseComments)
		if err != nil {
			return err
		}
		rel := strings.TrimPrefix(filepath.ToSlash(file), "../")
		all = append(all, source{rel, path.Dir(rel), strings.HasSuffix(rel, "_test.go"), tree, set})
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if len(all) < 30 {
		t.Fatalf("%d Go files found; the walk is broken", len(all))
	}
	return all
}

func TestArrowsPointDown(t *testing.T) {
	for _, s := range sources(t) {
		allowed, known := arrows[s.room]
		if !known {
			t.Errorf("%s: room %q is not in the list of arrows; add it, and think about who may know whom", s.file, s.room)
			continue
		}
		for _, spec := range s.tree.Imports {
			name := strings.Trim(spec.Path.Value, `"`)
			inner, ours := strings.CutPrefix(name, "gemel/")
			if ours && inner != s.room && !slices.Contains(allowed, inner) && !slices.Contains(allowed, "*") {
				t.Errorf("%s: %s must not import %s; it may import %v", s.file, s.room, inner, allowed)
			}
			for module, rule := range outside {
				if strings.HasPrefix(name, module) && !s.test && !slices.Contains(rule.rooms, s.room) {
					t.Errorf("%s: %s must not import %s; only %v may: %s", s.file, s.room, name, rule.rooms, rule.reason)
				}
			}
		}
	}
}

func TestOnlyTheCrewStartsGoroutines(t *testing.T) {
	// The write watchdog bounds a write(2) that has no deadline of its own.
	may := []string{"daemon/crew/crew.go", "drivers/line/serial.go"}
	for _, s := range sources(t) {
		if s.test || slices.Contains(may, s.file) || s.room == "drivers/drivertest" { // a test kit plays the far end
			continue
		}
		ast.Inspect(s.tree, func(n ast.Node) bool {
			if g, ok := n.(*ast.GoStmt); ok {
				t.Errorf("%s: a bare go statement; take daemon/crew, where a panic finds the rest state", s.pos.Position(g.Pos()))
			}
			// A WaitGroup may wait for others' goroutines; its Go starts one.
			if call, ok := n.(*ast.CallExpr); ok {
				if sel, ok := call.Fun.(*ast.SelectorExpr); ok && sel.Sel.Name == "Go" && len(call.Args) == 1 {
					t.Errorf("%s: a goroutine without a name; take daemon/crew", s.pos.Position(call.Pos()))
				}
			}
			return true
		})
	}
}

func TestNothingHappensBecauseAPackageWasImported(t *testing.T) {
	for _, s := range sources(t) {
		for _, d := range s.tree.Decls {
			if f, ok := d.(*ast.FuncDecl); ok && f.Recv == nil && f.Name.Name == "init" {
				t.Errorf("%s: func init; let the caller say it", s.pos.Position(f.Pos()))
			}
		}
	}
}

func TestEveryRoomSaysOnceWhatItPromises(t *testing.T) {
	docs := map[string][]string{}
	for _, s := range sources(t) {
		if _, seen := docs[s.room]; !seen {
			docs[s.room] = nil
		}
		if s.tree.Doc != nil && (!s.test || strings.HasSuffix(s.tree.Name.Name, "_test") && s.room == "daemon") {
			docs[s.room] = append(docs[s.room], s.file)
		}
	}
	for room, files := range docs {
		if len(files) != 1 {
			t.Errorf("%s: %d package comments %v; want one", room, len(files), files)
		}
	}
}

func TestTheTopLevelIsTheAgreedOne(t *testing.T) {
	agreed := []string{"daemon", "drivers", "scan", "protocol", "sim", "configs", "testdata", "go.mod", "go.sum", "README.md", "DEVELOPERS.md", "LICENSE"}
	entries, err := os.ReadDir("..")
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		if !strings.HasPrefix(e.Name(), ".") && !slices.Contains(agreed, e.Name()) && e.Name() != "gemel-data" {
			t.Errorf("%s stands at the top level; want one of %v", e.Name(), agreed)
		}
	}
}
