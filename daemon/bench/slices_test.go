package bench

import (
	"encoding/json"
	"fmt"
	"os"
	"regexp"
	"strconv"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/scan/recipe"
)

// tenThousand is as many slices as a recipe may have, in its dwell and in its darks.
const tenThousand = "title: Many slices\ndwell: {time: 10 s, slice: 1 ms}\ndark: {every: 1 point, dwell: {time: 10 s, slice: 1 ms}}\n"

// longNames is the demo's bench with channels whose names are as long as names may be.
func longNames(t *testing.T) *File {
	t.Helper()
	text, err := os.ReadFile("../../configs/demo-bench.yaml")
	if err != nil {
		t.Fatal(err)
	}
	for _, name := range []string{"signal", "idler", "pairs", "gates"} {
		long := name + strings.Repeat("x", 64-len(name))
		re := regexp.MustCompile(`(?m)^(    (?:channels|coincidences|gate_tag|channel):.*?\b)` + name + `\b`)
		for re.Match(text) {
			text = re.ReplaceAll(text, []byte("${1}"+long))
		}
	}
	f, err := Parse("long.yaml", text)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

// A reading that a recipe was let through with must be one that the logbook takes: the run would end
// at its first point.
func TestARecipeMayCutADwellIntoAsManySlicesAsAnEntryHolds(t *testing.T) {
	r, err := recipe.Parse("r.yaml", []byte(tenThousand))
	if err != nil {
		t.Fatal(err)
	}
	demo, err := Load("../../configs/demo-bench.yaml")
	if err != nil {
		t.Fatal(err)
	}
	if _, err := r.Plan(demo.Facts()); err != nil {
		t.Errorf("on the demo bench: %v; want ten thousand slices taken", err)
	}
	if n := bytesOf(t, demo, 10_000); n > protocol.MostBody {
		t.Errorf("ten thousand slices of the demo bench are %d bytes; want at most %d", n, protocol.MostBody)
	}

	long := longNames(t)
	if n := bytesOf(t, long, 10_000); n <= protocol.MostBody {
		t.Fatalf("ten thousand slices of long names are %d bytes: nothing is tested", n)
	}
	_, err = r.Plan(long.Facts())
	if err == nil {
		t.Fatal("ten thousand slices of long names were taken")
	}
	said := regexp.MustCompile(`^r\.yaml:2:\d+: dwell: 10000 gates of 1 ms, each of up to \d+ bytes .*; want at most (\d+),.*\nr\.yaml:3:\d+: dark\.dwell: 10000 gates`).FindStringSubmatch(err.Error())
	if said == nil {
		t.Fatalf("refused with %q; want each dwell named, with what is allowed", err)
	}
	most, err := strconv.Atoi(said[1])
	if err != nil {
		t.Fatal(err)
	}
	for slices, fits := range map[int]bool{most: true, most + 1: false} {
		text := fmt.Sprintf("title: Most\ndwell: {time: %d ms, slice: 1 ms}\n", slices)
		r, err := recipe.Parse("r.yaml", []byte(text))
		if err != nil {
			t.Fatal(err)
		}
		if _, err := r.Plan(long.Facts()); (err == nil) != fits {
			t.Errorf("%d slices: %v; want them taken: %t", slices, err, fits)
		}
		if is := bytesOf(t, long, slices); fits && is > protocol.MostBody {
			t.Errorf("%d slices are %d bytes; want at most %d", slices, is, protocol.MostBody)
		}
	}
}

// bytesOf is the size of a reading with the greatest counts that the counter has.
func bytesOf(t *testing.T, f *File, slices int) int {
	t.Helper()
	most := uint64(1)<<f.Counter.Bits - 1
	one := protocol.Slice{GateSet: protocol.Seconds(1234567 * time.Nanosecond), Gate: protocol.Seconds(1234567 * time.Nanosecond), Raw: strings.Repeat(",+4.294967295E+09", len(f.Counter.Channels))}
	for _, ch := range f.Counter.Channels {
		one.Counts = append(one.Counts, protocol.Count{Channel: string(ch), Counts: most})
	}
	r := protocol.Reading{Counts: one.Counts}
	for range slices {
		r.Slices = append(r.Slices, one)
	}
	body, err := json.Marshal(r)
	if err != nil {
		t.Fatal(err)
	}
	return len(body)
}
