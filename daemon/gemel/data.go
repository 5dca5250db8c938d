package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/strict"
)

type checkCommand struct {
	Bench  string `placeholder:"FILE" help:"Bench file to check."`
	Recipe string `placeholder:"FILE" help:"Recipe to check, against the bench if one is named."`
	Data   string `placeholder:"DIR" help:"Data folder whose logbook to verify."`
	JSON   bool   `name:"json" help:"Print the findings as JSON."`
}

func (checkCommand) Help() string {
	return "Example:\n  gemel check --bench configs/demo-bench.yaml --recipe configs/demo-recipe.yaml\n\nNothing is opened, moved or written. Every finding of every file is reported at once."
}

func (c *checkCommand) Run(ctx context.Context, con *console) error {
	if c.Bench == "" && c.Recipe == "" && c.Data == "" {
		return errUse{errors.New("nothing to check; want --bench, --recipe or --data")}
	}
	var findings []protocol.Finding
	gather := func(err error) error {
		if e, ok := errors.AsType[*strict.Error](err); ok {
			findings = append(findings, e.Findings...)
			return nil
		}
		return err
	}
	var said []string
	var file *bench.File
	if c.Bench != "" {
		f, err := bench.Load(c.Bench)
		if err := gather(err); err != nil {
			return err
		}
		if f != nil {
			file = f
			said = append(said, fmt.Sprintf("%s: bench %s, %s, %s; sound.", c.Bench, f.Name, count(len(f.Lines), "line"), axesWord(len(f.Axes))))
		}
	}
	if c.Recipe != "" {
		words, err := c.recipe(file)
		if err := gather(err); err != nil {
			return err
		}
		if err == nil {
			said = append(said, words)
		}
	}
	if c.Data != "" {
		words, found, err := verify(ctx, c.Data)
		if err != nil {
			return err
		}
		findings = append(findings, found...)
		if len(found) == 0 {
			said = append(said, words)
		}
	}
	if c.JSON {
		if findings == nil {
			findings = []protocol.Finding{}
		}
		if err := con.json(map[string]any{"findings": findings}); err != nil {
			return err
		}
		if len(findings) > 0 {
			return errNotFinished
		}
		return nil
	}
	if len(findings) > 0 {
		return &strict.Error{Findings: findings}
	}
	fmt.Fprintln(con.out, strings.Join(said, "\n"))
	return nil
}

func axesWord(n int) string {
	if n == 1 {
		return "1 axis"
	}
	return fmt.Sprintf("%d axes", n)
}

func (c *checkCommand) recipe(f *bench.File) (string, error) {
	text, err := strict.ReadFile(c.Recipe)
	if err != nil {
		return "", err
	}
	if f == nil {
		if _, err := parseRecipe(c.Recipe, text); err != nil {
			return "", err
		}
		return fmt.Sprintf("%s: sound in itself; name a --bench to see whether it fits.", c.Recipe), nil
	}
	plan, err := planner(f, c.Recipe)(string(text), time.Now(), nil)
	if err != nil {
		return "", err
	}
	return fmt.Sprintf("%s: %q, %s, %s of light; sound, and fits the bench.", c.Recipe, plan.Title, count(len(plan.Points), "point"), count(len(plan.Visits()), "reading")), nil
}

// verify opens a logbook for reading only and checks everything that can be checked in it.
func verify(ctx context.Context, data string) (string, []protocol.Finding, error) {
	file := logbookFile(data)
	book, err := logbook.OpenReadOnly(file)
	if err != nil {
		return "", nil, err
	}
	defer book.Close()
	var found []protocol.Finding
	for _, text := range book.Verify(ctx) {
		found = append(found, protocol.Finding{File: file, Found: text})
	}
	runs, err := book.Runs(ctx)
	if err != nil {
		return "", nil, err
	}
	var words strings.Builder
	fmt.Fprintf(&words, "%s: %s; sound.", file, count(len(runs), "run"))
	for _, r := range runs {
		fmt.Fprintf(&words, "\n  %s  %s  %q", r.Run, r.State, r.Title)
	}
	return words.String(), found, nil
}

func logbookFile(data string) string { return filepath.Join(data, "logbook.db") }

type noteCommand struct {
	Data string `default:"gemel-data" placeholder:"DIR" help:"Data folder."`
	On   string `default:"-" placeholder:"RUN" help:"The run it is about; without it, the bench."`
	Text string `arg:"" help:"What you have to say."`
}

func (noteCommand) Help() string {
	return "Example:\n  gemel note --on 20310203-220000-0badcafe \"door opened at 01:10 for the dewar\""
}

func (c *noteCommand) Run(ctx context.Context, con *console) error {
	if _, err := os.Stat(logbookFile(c.Data)); err != nil {
		return errUse{fmt.Errorf("no logbook in %s; name the data folder with --data", c.Data)}
	}
	book, err := logbook.OpenForNotes(c.Data)
	if err != nil {
		return err
	}
	defer book.Close()
	if err := book.AddNote(ctx, protocol.RunID(c.On), whoami(), c.Text); err != nil {
		return err
	}
	fmt.Fprintln(con.out, "noted")
	return nil
}

type exportCommand struct {
	Data string `default:"gemel-data" placeholder:"DIR" help:"Data folder."`
	Run_ string `name:"run" placeholder:"RUN" help:"The run; without it the last one."`
	To   string `placeholder:"FILE" help:"Where to write; without it standard output."`
}

func (exportCommand) Help() string {
	return "Example:\n  gemel export --to night.csv\n\nThe units of all columns stand in the header comment of the file."
}

func (c *exportCommand) Run(ctx context.Context, con *console) (err error) {
	book, err := logbook.OpenReadOnly(logbookFile(c.Data))
	if err != nil {
		return err
	}
	defer book.Close()
	run := protocol.RunID(c.Run_)
	if run == "" {
		runs, err := book.Runs(ctx)
		if err != nil {
			return err
		}
		if len(runs) == 0 {
			return fmt.Errorf("%s holds no run yet", logbookFile(c.Data))
		}
		run = runs[len(runs)-1].Run
	}
	if c.To == "" {
		return book.Export(ctx, run, con.out)
	}
	f, err := os.OpenFile(c.To, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if errors.Is(err, os.ErrExist) {
		return errUse{fmt.Errorf("%s exists; name another file", c.To)}
	}
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	return book.Export(ctx, run, f)
}
