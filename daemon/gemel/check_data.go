package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
)

// afterDamage says what a person does next.
func afterDamage(data string) string {
	return fmt.Sprintf("copy the folder, then `gemel check --data %s --rescue FILE` writes what is sound into a new logbook", data)
}

func whenDamaged(data string, err error) error {
	if errors.Is(err, logbook.ErrDamaged) {
		return fmt.Errorf("%w; %s", err, afterDamage(data))
	}
	return err
}

// verify opens a logbook for reading only and checks everything that can be checked in it.
func verify(ctx context.Context, data string) (string, []protocol.Finding, error) {
	file := logbookFile(data)
	if _, err := os.Stat(file); errors.Is(err, os.ErrNotExist) {
		return "", nil, fmt.Errorf("no logbook in %s; want the data folder of a run", data)
	}
	damaged := func(what string) protocol.Finding {
		return protocol.Finding{File: file, Found: what, Want: "a sound logbook: " + afterDamage(data)}
	}
	book, err := logbook.OpenReadOnly(file)
	if errors.Is(err, logbook.ErrDamaged) {
		return "", []protocol.Finding{damaged(strings.TrimPrefix(err.Error(), file+": "))}, nil
	}
	if err != nil {
		return "", nil, err
	}
	defer book.Close()
	a := book.Audit(ctx)
	if ctx.Err() != nil {
		return "", nil, ctx.Err()
	}
	if len(a.Wrong) > 0 {
		found := []protocol.Finding{}
		for _, text := range a.Wrong {
			found = append(found, protocol.Finding{File: file, Found: text})
		}
		found[len(found)-1] = damaged(a.Wrong[len(a.Wrong)-1]) // what is wanted is said once
		return "", found, nil
	}
	runs, err := book.Runs(ctx)
	if err != nil {
		return "", nil, err
	}
	var words strings.Builder

	fmt.Fprintf(&words, "%s: %s, %d entries, %s among them, %s; sound.", file, count(a.Runs, "run"), a.Entries, count(a.Readings, "reading"), count(a.Notes, "note"))
	fmt.Fprintf(&words, "\n  checked: %s", strings.Join(a.Checked, "; "))
	if a.Unsummed > 0 {
		fmt.Fprintf(&words, "\n  %d entries are from before bodies had sums: that they are what was written cannot be checked", a.Unsummed)
	}
	for _, r := range runs {
		fmt.Fprintf(&words, "\n  %s  %s  %q%s", r.Run, r.State, r.Title, howItStands(r))
	}
	return words.String(), nil, nil
}

// howItStands says when a run ended, or since when it is underway, and of one that did not finish why.
func howItStands(r logbook.RunRow) string {
	text := ""
	switch {
	case !r.EndedAt.IsZero():
		text = ", ended " + r.EndedAt.Local().Format(time.DateTime)
	case !r.StartedAt.IsZero():
		text = ", began " + r.StartedAt.Local().Format(time.DateTime)
	}
	if r.State == protocol.Finished || r.State == protocol.Queued || r.Reason == "" {
		return text
	}
	return text + ": " + asItWas(r.Reason)
}

// rescue writes what is sound of a damaged logbook into a new one. Its exit code says whether
// anything was left.
func rescue(ctx context.Context, con *console, data, to string, asJSON bool) error {
	r, err := logbook.Rescue(ctx, logbookFile(data), to)
	if errors.Is(err, logbook.ErrLocked) {
		return fmt.Errorf("%w; stop the daemon first", err)
	}
	if err != nil {
		return err
	}
	if asJSON {
		left := r.Left
		if left == nil {
			left = []string{}
		}
		err = con.json(map[string]any{"logbook": to, "runs": r.Runs, "entries": r.Entries, "notes": r.Notes, "unsummed": r.Unsummed, "left": left, "rest": r.Rest})
	} else {
		fmt.Fprintf(con.out, "%s: %s, %d entries, %s\n", to, count(r.Runs, "run"), r.Entries, count(r.Notes, "note"))
		if r.Unsummed > 0 {
			fmt.Fprintf(con.out, "  %d of them are from before bodies had sums: they can be read; that they are what was written cannot be checked\n", r.Unsummed)
		}
		for _, text := range r.Left {
			fmt.Fprintln(con.out, "  left:", text)
		}
		if r.Rest != "" {
			fmt.Fprintf(con.out, "  what is left and can be read is in %s\n", r.Rest)
		}
		fmt.Fprintf(con.out, "to go on with it: move %s and its -wal and -shm away, and put %s in its place; leave %s: the next start makes the stream in it anew from the new logbook, so copy it before that if what was published beyond this logbook still matters\n", logbookFile(data), to, filepath.Join(data, "nats"))
	}
	if err == nil && len(r.Left) > 0 {
		return errNotFinished
	}
	return err
}

// snapshot copies a logbook, and looks at the copy.
func snapshot(ctx context.Context, con *console, book *logbook.Book, data, to string) error {
	if _, err := os.Lstat(to); err == nil {
		return errUse{fmt.Errorf("%s exists; name another file", to)}
	}
	if err := book.Snapshot(ctx, to); err != nil {
		return whenDamaged(data, err)
	}
	copied, err := logbook.OpenReadOnly(to)
	if err != nil {
		return err
	}
	defer copied.Close()
	a := copied.Audit(ctx)
	if len(a.Wrong) > 0 {
		return fmt.Errorf("%s: copied, and it is damaged, as is what it was copied from: %s; %s", to, a.Wrong[0], afterDamage(data))
	}
	fmt.Fprintf(con.out, "%s: %s, %d entries; sound.\n", to, count(a.Runs, "run"), a.Entries)
	return nil
}
