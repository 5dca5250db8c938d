package main

import (
	"context"
	"errors"
	"fmt"

	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/protocol"
)

type reportCommand struct {
	Data string `default:"gemel-data" placeholder:"DIR" help:"Data folder."`
	Of   string `name:"run" placeholder:"RUN" help:"The run; without it the last one whose recipe asks for a result."`
	JSON bool   `name:"json" help:"Print JSON."`
}

func (reportCommand) Help() string {
	return "Example:\n  gemel report --data gemel-data\n\nThe result is worked out from the logbook file alone: recipe and bench file are read from the run's own header, and a copy of the file gives the same digits."
}

func (c *reportCommand) Run(ctx context.Context, con *console) error {
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
	return con.result(ctx, book, run, c.JSON)
}

// result prints a run's result. One that was refused is a failure that says why.
func (c *console) result(ctx context.Context, book *logbook.Book, run protocol.RunID, asJSON bool) error {
	r, err := report.Of(ctx, book, run)
	if err != nil {
		return err
	}
	if asJSON {
		text, err := r.JSON()
		if err != nil {
			return err
		}
		if _, err := c.out.Write(text); err != nil {
			return err
		}
	} else if _, err := fmt.Fprint(c.out, r.Text()); err != nil {
		return err
	}
	if r.Value == nil {
		return errNotFinished
	}
	return nil
}

func lastWithResult(ctx context.Context, book *logbook.Book, file string) (protocol.RunID, error) {
	runs, err := book.Runs(ctx)
	if err != nil {
		return "", err
	}
	for i := len(runs) - 1; i >= 0; i-- {
		if _, err := report.Of(ctx, book, runs[i].Run); !errors.Is(err, report.ErrNoResult) {
			return runs[i].Run, nil
		}
	}
	return "", fmt.Errorf("%s holds no run whose recipe asks for a result", file)
}
