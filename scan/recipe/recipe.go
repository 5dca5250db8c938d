// Package recipe turns the text of a recipe into a checked plan for one bench.
//
// Parse reads the text alone and reports everything that is wrong with it at once; Plan adds what
// the bench offers. Grids are exact: angles are whole micro-arcseconds, so 0 deg to 1 deg by
// 0.1 deg are eleven points and the last is 1 deg. The number of points and visits is worked out by
// arithmetic and bounded before any of them exists. The same text, bench and moment give the same
// plan, for ever, because a resumed run works its plan out again.
//
// Names are resolved in Plan: a detector stands for its singles channel, times of the day become
// instants of the moment that the run is accepted, the conjugate of an arm and the places of a
// reference become angles by the model that Facts carries, a value from an earlier result what Facts
// finds. Where it finds none the plan is provisional (scan.Plan.Open): nobody goes there, and it is
// worked out again, and judged in full, once the value is known.
//
// Points stand in the order that the sweep writes: nothing is reordered to save travel but the
// places within one set of references, whose order nobody asks for. A point whose conjugate does
// not leave the crystal keeps its index and is empty; points that a user wrote as angles are never
// emptied, since to see no light there may be what they are for.
//
// Print writes a recipe as text that reads back as the same one.
//
// It refuses a step that does not divide its range (naming the ends that would do), a step that is
// negative or zero, a dwell that stops on coincidences, which would bias the efficiency measured, a
// background whose axis does not stand at a declared angle otherwise, a result that the sweep cannot
// give, an efficiency that does not say which readings make it, a reference that moves what no point
// brings back or whose bounds its own counting error would break, and, with keep-outs, points and
// ways between them that the bench must not take.
package recipe

import (
	"encoding/json"
	"fmt"
	"math/big"
	"time"

	"gemel/protocol/strict"
	"gemel/scan"
)

// MaxVisits bounds points × times of one recipe.
const MaxVisits = 1_000_000

// The other bounds of a recipe. They are far beyond use, and keep mistakes and strangers small.
const (
	maxEntries = 6
	maxList    = 10_000
	maxTimes   = 100_000
	maxSlices  = 10_000
	minDwell   = time.Millisecond
	maxDwell   = 24 * time.Hour
	maxRetries = 100
)

// Order is how the points of the sweep follow one another.
type Order string

// The orders. Lines run as their entry is written: downwards when from lies above to.
const (
	Ascending  Order = "ascending"  // every line in the same direction
	Serpentine Order = "serpentine" // every second inner line backwards, every second pass too
	Shuffled   Order = "shuffled"   // each pass in an order of its own, so that drift is not taken for a dependence on angle
)

// Recipe is a recipe that is sound in itself. Whether a bench can do it is Plan's to say.
type Recipe struct {
	File       string
	Text       string
	Title      string
	Sweep      []Entry // outermost first; empty: count where everything stands
	Order      Order
	Dwell      scan.Dwell
	Repeat     scan.Repeat
	Dark       *Cadence
	Background *Background
	Trouble    scan.Trouble
	Reference  *Reference
	Refine     *Refine
	Results    []Result
	Guards     []Guard
	Schedule   *Schedule

	sweepAt strict.Place
	dwellAt strict.Place
	ofAt    strict.Place // of the dwell's trigger
	of      string       // as it is written; empty: not there
}

// Load reads a recipe file.
func Load(path string) (*Recipe, error) {
	text, err := strict.ReadFile(path)
	if err != nil {
		return nil, err
	}
	return Parse(path, text)
}

// Parse reads a recipe. The name of the file is used in findings only. The error is a
// *strict.Error with all findings.
func Parse(file string, text []byte) (*Recipe, error) {
	doc := strict.Parse(file, text)
	r := read(doc)
	if err := doc.Err(); err != nil {
		return nil, err
	}
	r.File, r.Text = file, string(text)
	return r, nil
}

// Schema is the JSON Schema of recipes, made of the reader that Parse uses.
func Schema() (json.RawMessage, error) {
	return strict.Describe("gemel recipe", func(doc *strict.Doc) { read(doc) })
}

func read(doc *strict.Doc) *Recipe {
	m := doc.Root()
	r := &Recipe{
		Title:  m.Need("title").Text(),
		Order:  readOrder(m.Opt("order")),
		Repeat: readRepeat(m.Opt("repeat")),
	}
	r.Repeat.Serpentine = r.Order == Serpentine
	r.Repeat.Shuffled = r.Order == Shuffled
	sweep := m.Opt("sweep")
	r.Sweep, r.sweepAt = readSweep(sweep), sweep.Place()
	dwell := m.Need("dwell")
	r.readDwell(dwell)
	r.Dark = readDark(m.Opt("dark"))
	r.Background = readBackground(m.Opt("background"))
	r.Trouble = readTrouble(m.Opt("trouble"))
	r.Reference = readReference(m.Opt("reference"), r.Dwell)
	r.Refine = readRefine(m.Opt("refine"))
	r.readResults(m.Opt("result"))
	r.readGuards(m.Opt("guards"))
	r.Schedule = readSchedule(m.Opt("schedule"))
	m.Done()
	if visits := r.visits(); visits.Cmp(big.NewInt(MaxVisits)) > 0 {
		sweep.Fail(fmt.Sprintf("%s points visited %d times are %s visits", r.points(), r.Repeat.Times, visits), fmt.Sprintf("at most %d", MaxVisits))
	}
	return r
}

func readOrder(v strict.Value) Order {
	return Order(v.Choice([]string{string(Ascending), string(Serpentine), string(Shuffled)}, string(Ascending)))
}

func readRepeat(v strict.Value) scan.Repeat {
	r := scan.Repeat{Times: 1}
	if !v.Given() {
		return r
	}
	m := v.Map()
	r.Times = int(m.Need("times").Int(1, maxTimes, 1))
	r.InPlace = m.Opt("as").Choice([]string{"passes", "in_place"}, "passes") == "in_place"
	m.Done()
	return r
}

func readTrouble(v strict.Value) scan.Trouble {
	t := scan.Trouble{Retries: 3, Then: scan.Hold}
	if !v.Given() {
		return t
	}
	m := v.Map()
	t.Retries = int(m.Opt("retries").Int(0, maxRetries, 3))
	t.Then = scan.Then(m.Opt("then").Choice([]string{string(scan.Hold), string(scan.Skip), string(scan.Stop)}, string(scan.Hold)))
	t.GiveUpAfter = m.Opt("give_up_after").Duration(time.Minute, 7*24*time.Hour, 0)
	m.Done()
	return t
}
