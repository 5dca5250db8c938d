package logbook

import (
	"context"
	"encoding/csv"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"unicode"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// Export writes the readings of a run as a table: RFC 4180 fields, one row a reading, accepted or
// not. Before the table stand lines that begin with "# " and say which run it is, who made it, and
// the unit of every column. What a reading does not have is an empty field.
func (b *Book) Export(ctx context.Context, run protocol.RunID, w io.Writer) error {
	row, err := b.Run(ctx, run)
	if err != nil {
		return err
	}
	last, err := b.lastOf(ctx, run)
	if err != nil {
		return err
	}
	t, err := newTable(b.readingsUpTo(ctx, run, last))
	if err != nil {
		return err
	}
	simulated := "no"
	if row.Simulated != nil {
		simulated = fmt.Sprintf("yes, clock factor %d", *row.Simulated)
	}
	comments := []string{
		"readings of one run, written by gemel",
		"run: " + string(row.Run), "title: " + row.Title, "bench: " + row.Bench,
		"program version: " + row.Version, "simulated: " + simulated, "state: " + string(row.State),
	}
	names := make([]string, len(t))
	for i, c := range t {
		names[i] = c.name
		comments = append(comments, "column "+c.name+": "+c.unit)
	}
	for _, c := range comments {
		if _, err := io.WriteString(w, "# "+oneLine(c)+"\r\n"); err != nil {
			return err
		}
	}
	out := csv.NewWriter(w)
	out.UseCRLF = true
	if err := out.Write(names); err != nil {
		return err
	}
	fields := make([]string, len(t))
	for r, err := range b.readingsUpTo(ctx, run, last) {
		if err != nil {
			return err
		}
		for i, c := range t {
			fields[i] = c.field(r)
		}
		if err := out.Write(fields); err != nil {
			return err
		}
	}
	out.Flush()
	return out.Error()
}

// column is one column of an export.
type column struct {
	name  string
	unit  string
	field func(Reading) string
}

// newTable finds the columns that the readings have: the fixed ones, then axes, channels, settings
// and sensors in the order they first appear.
func newTable(readings func(func(Reading, error) bool)) ([]column, error) {
	var axes, channels []string
	var settings, sensors []named
	for r, err := range readings {
		if err != nil {
			return nil, err
		}
		for _, a := range r.Angles {
			axes = add(axes, a.Axis)
		}
		for _, c := range r.Counts {
			channels = add(channels, c.Channel)
		}
		for _, s := range r.Settings {
			settings = add(settings, named{s.Name, s.Unit})
		}
		for _, s := range r.Sensors {
			sensors = add(sensors, named{s.Sensor, s.Unit})
		}
	}

	t := []column{
		{"sequence", "number of the entry in the run's journal", func(r Reading) string { return strconv.FormatInt(r.Sequence, 10) }},
		{"point", "number of the point, from 0", func(r Reading) string { return whole(r.Point) }},
		{"visit", "number of the visit to the point, from 1", func(r Reading) string { return whole(r.Visit) }},
		{"kind", "light, dark, background, reference or check", func(r Reading) string { return string(r.Kind) }},
		{"attempt", "number of the attempt, from 1", func(r Reading) string { return strconv.Itoa(r.Attempt) }},
		{"accepted", "1 or 0", func(r Reading) string { return yes(r.Accepted) }},
		{"reason", "text", func(r Reading) string { return r.Reason }},
		{"doubtful", "1 or 0", func(r Reading) string { return yes(r.Doubtful) }},
		{"doubt", "text", func(r Reading) string { return r.Doubt }},
		{"started_at", "UTC, RFC 3339", func(r Reading) string { return instant(r.StartedAt) }},
		{"ended_at", "UTC, RFC 3339", func(r Reading) string { return instant(r.EndedAt) }},
		{"gate_set_s", "s", func(r Reading) string { return seconds(r.GateSet) }},
		{"gate_s", "s", func(r Reading) string { return seconds(r.Gate) }},
	}
	for _, name := range axes {
		of := func(get func(protocol.Angle) string) func(Reading) string {
			return func(r Reading) string {
				return first(r.Angles, func(a protocol.Angle) bool { return a.Axis == name }, get)
			}
		}
		t = append(t,
			column{name + ".target_deg", "deg", of(func(a protocol.Angle) string { return degrees(a.Target) })},
			column{name + ".before_deg", "deg", of(func(a protocol.Angle) string { return degrees(a.Before) })},
			column{name + ".after_deg", "deg", of(func(a protocol.Angle) string { return degrees(a.After) })},
			column{name + ".proof", "proved by an encoder, or reported by the controller", of(func(a protocol.Angle) string { return a.Proof })})
	}
	for _, name := range channels {
		t = append(t, column{name + ".counts", "counts in gate_s", func(r Reading) string {
			return first(r.Counts, func(c protocol.Count) bool { return c.Channel == name },
				func(c protocol.Count) string { return strconv.FormatUint(c.Counts, 10) })
		}})
	}
	for _, n := range settings {
		of := func(get func(protocol.Setting) float64) func(Reading) string {
			return func(r Reading) string {
				return first(r.Settings, func(s protocol.Setting) bool { return s.Name == n.name && s.Unit == n.unit },
					func(s protocol.Setting) string { return number(get(s)) })
			}
		}
		t = append(t,
			column{n.name + ".target", n.unit, of(func(s protocol.Setting) float64 { return s.Target })},
			column{n.name + ".before", n.unit, of(func(s protocol.Setting) float64 { return s.Before })},
			column{n.name + ".after", n.unit, of(func(s protocol.Setting) float64 { return s.After })})
	}
	for _, n := range sensors {
		of := func(get func(protocol.Sensor) string) func(Reading) string {
			return func(r Reading) string {
				return first(r.Sensors, func(s protocol.Sensor) bool { return s.Sensor == n.name && s.Unit == n.unit }, get)
			}
		}
		t = append(t,
			column{n.name + ".minimum", n.unit, of(func(s protocol.Sensor) string { return number(s.Minimum) })},
			column{n.name + ".mean", n.unit, of(func(s protocol.Sensor) string { return number(s.Mean) })},
			column{n.name + ".maximum", n.unit, of(func(s protocol.Sensor) string { return number(s.Maximum) })},
			column{n.name + ".samples", "number of samples", of(func(s protocol.Sensor) string { return strconv.Itoa(s.Samples) })})
	}
	return t, nil
}

// named is a device with the unit its values were recorded in; one that changed its unit within a
// run gets columns for each.
type named struct{ name, unit string }

func add[T comparable](list []T, item T) []T {
	if slices.Contains(list, item) {
		return list
	}
	return append(list, item)
}

func first[T any](list []T, is func(T) bool, get func(T) string) string {
	if i := slices.IndexFunc(list, is); i >= 0 {
		return get(list[i])
	}
	return ""
}

func whole(n *int) string {
	if n == nil {
		return ""
	}
	return strconv.Itoa(*n)
}

func yes(b bool) string {
	if b {
		return "1"
	}
	return "0"
}

func instant(t protocol.Time) string {
	if t.IsZero() {
		return ""
	}
	return t.String()
}

func number(f float64) string { return strconv.FormatFloat(f, 'g', -1, 64) }

func degrees(a unit.Angle) string { return strings.TrimSuffix(a.String(), " deg") }

func seconds(s protocol.Seconds) string {
	text, _ := s.MarshalJSON() // cannot fail: every duration is a decimal number
	return string(text)
}

// oneLine keeps a title with a line break in it from ending a comment.
func oneLine(text string) string {
	return strings.Map(func(r rune) rune {
		if unicode.IsControl(r) {
			return ' '
		}
		return r
	}, text)
}

// Snapshot writes a copy of the logbook as it is now to a new file, while it may go on being
// appended to. The copy is on the disk, whole, when Snapshot returns, and no file of that name is
// there when it fails. An existing file is refused.
func (b *Book) Snapshot(ctx context.Context, file string) (err error) {
	file, err = filepath.Abs(file)
	if err != nil {
		return fmt.Errorf("snapshot: %w", err)
	}
	if _, err := os.Lstat(file); err == nil {
		return fmt.Errorf("snapshot %s: there is such a file; want a new name", file)
	}
	part := file + ".part"
	if err := os.Remove(part); err != nil && !os.IsNotExist(err) {
		return fmt.Errorf("snapshot: %w", err)
	}
	defer func() {
		if err != nil {
			os.Remove(part)
		}
	}()
	db, err := open(b.file, "mode=ro")
	if err != nil {
		return err
	}
	defer db.Close()
	if _, err := db.ExecContext(ctx, `VACUUM INTO ?`, part); err != nil {
		return wrap("snapshot "+file, err)
	}
	if err := keep(part, file); err != nil {
		return fmt.Errorf("snapshot: %w", err)
	}
	return nil
}

// keep brings a finished file to the disk and gives it its name.
func keep(part, file string) error {
	if err := flush(part, os.O_RDWR); err != nil {
		return err
	}
	if err := os.Rename(part, file); err != nil {
		return err
	}
	if runtime.GOOS == "windows" { // has no flush for folders
		return nil
	}
	return flush(filepath.Dir(file), os.O_RDONLY) // the name, too
}

func flush(path string, flag int) error {
	f, err := os.OpenFile(path, flag, 0)
	if err != nil {
		return err
	}
	defer f.Close()
	return f.Sync()
}
