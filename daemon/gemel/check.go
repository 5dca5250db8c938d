package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"time"

	"gemel/daemon/bench"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan/recipe"
)

type checkCommand struct {
	Bench  string `placeholder:"FILE" help:"Bench file to check."`
	Recipe string `placeholder:"FILE" help:"Recipe to check, against the bench if one is named."`
	Data   string `placeholder:"DIR" help:"Data folder whose logbook to verify."`
	Rescue string `placeholder:"FILE" help:"Write what is sound of a damaged logbook (--data) into a new file."`
	JSON   bool   `name:"json" help:"Print what was checked and the findings as JSON."`
	Schema string `placeholder:"recipe|bench" help:"Print the JSON Schema of recipes or of bench files, and check nothing."`
}

func (checkCommand) Help() string {
	return "Example:\n  gemel check --bench configs/demo-bench.yaml --recipe configs/demo-recipe.yaml\n\nNothing is opened, moved or written. Every finding of every file is reported at once.\n\n  gemel check --schema recipe > recipe.schema.json\n\nprints what an editor's language support can check while you type. It knows keys, words and units, not the bench, so that only this command finds everything.\n\n  gemel check --data gemel-data\n\nverifies a logbook, also beside a daemon that writes it.\n\n  gemel check --data gemel-data --rescue rescued.db\n\nreads a damaged one without changing it, and writes what is sound into a new file."
}

func (c *checkCommand) Run(ctx context.Context, con *console) error {
	if c.Schema != "" {
		if c.Bench != "" || c.Recipe != "" || c.Data != "" || c.Rescue != "" || c.JSON {
			return errUse{errors.New("--schema beside other flags; want it alone: it checks nothing")}
		}
		return printSchema(con.out, c.Schema)
	}
	if c.Rescue != "" {
		if c.Bench != "" || c.Recipe != "" || c.Data == "" {
			return errUse{errors.New("--rescue needs --data, and neither --bench nor --recipe")}
		}
		return rescue(ctx, con, c.Data, c.Rescue, c.JSON)
	}
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
		if said == nil {
			said = []string{}
		}
		if err := con.json(map[string]any{"sound": said, "findings": findings}); err != nil {
			return err
		}
		if len(findings) > 0 {
			return errNotFinished
		}
		return nil
	}
	for _, line := range said {
		fmt.Fprintln(con.out, line)
	}
	if len(findings) > 0 {
		return &strict.Error{Findings: findings}
	}
	return nil
}

// printSchema prints the JSON Schema of recipes or of bench files.
func printSchema(w io.Writer, of string) error {
	schema, ok := map[string]func() (json.RawMessage, error){"recipe": recipe.Schema, "bench": bench.Schema}[of]
	if !ok {
		return errUse{fmt.Errorf("--schema %s; want recipe or bench", of)}
	}
	text, err := schema()
	if err != nil {
		return err
	}
	_, err = w.Write(text)
	return err
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
