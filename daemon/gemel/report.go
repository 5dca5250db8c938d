package main

import (
	"context"
	"errors"
	"fmt"
	"path/filepath"
	"strings"

	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/scan/estimate"
)

type reportCommand struct {
	Data string `default:"gemel-data" placeholder:"DIR" help:"Data folder."`
	Of   string `name:"run" placeholder:"RUN" help:"The run; without it the last one whose recipe asks for a result."`
	JSON bool   `name:"json" help:"Print JSON."`

	Without   []string `placeholder:"STEP" enum:"background,accidentals,accidentals_in_dead_time,afterpulsing,dead_time,window_capture,path,collection," help:"Corrections of an efficiency to switch off: background, accidentals, accidentals_in_dead_time, afterpulsing, dead_time, window_capture, path, collection."`
	Displaced bool     `help:"Accidentals from the counter's displaced windows instead of the product of the rates."`
	Trials    int      `placeholder:"N" help:"Propagate the uncertainties by Monte Carlo, too (JCGM 101), with so many trials."`
	Seed      uint64   `default:"1" help:"Of the Monte Carlo trials."`
	Plot      string   `placeholder:"FILE.svg" help:"Draw the result; of several each in a file of its own, FILE-1-KIND.svg and so on."`
}

func (reportCommand) Help() string {
	return `Examples:
  gemel report --data gemel-data
  gemel report --data gemel-data --json
  gemel report --data gemel-data --plot ring.svg

The results are worked out from the logbook file alone: recipe and bench file are read from the run's own header, and a copy of the file gives the same digits.

--json prints one object: the recipe's first result, under the key results the list of all of them, the first included, and under the key night what happened to the run: holds, interruptions, doubts, what was left out, notes. The exit code is 0 only if each has a value; one without says why under because. Of a run whose recipe asks for no result the night is printed, the list is empty, and the exit code is 0. Text tells times in local time, JSON in UTC.`
}

func (c *reportCommand) Run(ctx context.Context, con *console) error {
	if c.Plot != "" && !strings.EqualFold(filepath.Ext(c.Plot), ".svg") {
		return fmt.Errorf("--plot %q: a picture is SVG; want a name that ends in .svg", c.Plot)
	}
	book, err := logbook.OpenReadOnly(logbookFile(c.Data))
	if err != nil {
		return err
	}
	defer book.Close()
	run := protocol.RunID(c.Of)
	if run == "" {
		if run, err = lastWithResult(ctx, book, logbookFile(c.Data)); err != nil {
			return err
		}
	}
	o := report.Options{Displaced: c.Displaced, Trials: c.Trials, Seed: c.Seed}
	for _, step := range c.Without {
		o.Off = append(o.Off, estimate.Step(step))
	}
	all, err := report.All(ctx, book, run, o)
	if errors.Is(err, report.ErrNoResult) && c.Plot == "" {
		return c.night(ctx, con, book, run)
	}
	if err != nil {
		return err
	}
	for _, r := range all {
		if len(o.Off) > 0 && r.Kind != "efficiency" {
			fmt.Fprintf(con.err, "--without switches corrections of an efficiency off; a %s has none of them\n", strings.ReplaceAll(r.Kind, "_", " "))
		}
	}
	night, err := report.NightOf(ctx, book, run)
	if err != nil {
		return err
	}
	// The report first: a picture that cannot be drawn must not take it away.
	err = con.results(all, night, c.JSON)
	if c.Plot != "" {
		if err := c.draw(ctx, con, book, run, all); err != nil {
			return err
		}
	}
	return err
}

// night prints what happened to a run whose recipe asks for no result.
func (c *reportCommand) night(ctx context.Context, con *console, book *logbook.Book, run protocol.RunID) error {
	n, err := report.NightOf(ctx, book, run)
	if err != nil {
		return err
	}
	if c.JSON {
		text, err := report.NightJSON(n)
		if err != nil {
			return err
		}
		_, err = con.out.Write(text)
		return err
	}
	_, err = fmt.Fprintf(con.out, "Run %s: %v; gemel export has its readings.\n\n%s", run, report.ErrNoResult, n.Text())
	return err
}

// draw writes a picture for each result that can be drawn, and tells the names of the files.
func (c *reportCommand) draw(ctx context.Context, con *console, book *logbook.Book, run protocol.RunID, all []estimate.Result) error {
	beside, err := report.BesideOf(ctx, book, run, all)
	if err != nil {
		return err
	}
	pictures := report.Pictures(all, beside)
	if len(pictures) == 0 {
		return report.ErrNothingToDraw
	}
	for _, p := range pictures {
		file := c.Plot
		if len(all) > 1 {
			ending := filepath.Ext(file)
			file = fmt.Sprintf("%s-%d-%s%s", strings.TrimSuffix(file, ending), p.Number, strings.ReplaceAll(p.Kind, "_", "-"), ending)
		}
		if err := writePicture(file, p.Draw); err != nil {
			return err
		}
		fmt.Fprintf(con.err, "drawn: the %s, %s\n", strings.ReplaceAll(p.Kind, "_", " "), file)
	}
	return nil
}

// results prints a run's results, and what happened in its night. A result that was refused is a
// failure that says why.
func (c *console) results(all []estimate.Result, night report.Night, asJSON bool) error {
	if asJSON {
		text, err := report.JSONWith(all, &night)
		if err != nil {
			return err
		}
		if _, err := c.out.Write(text); err != nil {
			return err
		}
	} else if _, err := fmt.Fprint(c.out, report.Morning(all, night)); err != nil {
		return err
	}
	for _, r := range all {
		if r.Value == nil {
			return errNotFinished
		}
	}
	return nil
}

// lastWithResult is the last run that has something to report: of those whose recipe asks for a result
// the last with a reading, so that a run withdrawn before it began hides none.
func lastWithResult(ctx context.Context, book *logbook.Book, file string) (protocol.RunID, error) {
	runs, err := book.Runs(ctx)
	if err != nil {
		return "", err
	}
	var empty protocol.RunID
	for i := len(runs) - 1; i >= 0; i-- {
		if _, err := report.All(ctx, book, runs[i].Run, report.Options{}); errors.Is(err, report.ErrNoResult) {
			continue
		}
		for range book.Readings(ctx, runs[i].Run) {
			return runs[i].Run, nil // an error, too, is one to show
		}
		if empty == "" {
			empty = runs[i].Run
		}
	}
	if empty != "" {
		return empty, nil
	}
	return "", fmt.Errorf("%s holds no run whose recipe asks for a result; gemel report --run RUN tells what happened to one, gemel check --data DIR lists them", file)
}
