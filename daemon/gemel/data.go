package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"

	"gemel/daemon/logbook"
	"gemel/protocol"
)

func logbookFile(data string) string { return filepath.Join(data, "logbook.db") }

// openBook opens the logbook of a data folder for reading.
func openBook(data string) (*logbook.Book, error) {
	if _, err := os.Stat(logbookFile(data)); errors.Is(err, os.ErrNotExist) {
		return nil, errUse{fmt.Errorf("no logbook in %s; name the data folder with --data", data)}
	}
	book, err := logbook.OpenReadOnly(logbookFile(data))
	return book, whenDamaged(data, err)
}

type noteCommand struct {
	Data string `default:"gemel-data" placeholder:"DIR" help:"Data folder."`
	On   string `name:"run" aliases:"on" default:"-" placeholder:"RUN" help:"The run it is about; without it, the bench."`
	Text string `arg:"" help:"What you have to say."`
}

func (noteCommand) Help() string {
	return "Example:\n  gemel note --run 20310203-220000-0badcafe \"door opened at 01:10 for the dewar\""
}

func (c *noteCommand) Run(ctx context.Context, con *console) error {
	if err := writeNote(ctx, c.Data, protocol.RunID(c.On), c.Text); err != nil {
		return err
	}
	fmt.Fprintln(con.out, "noted")
	return nil
}

func writeNote(ctx context.Context, data string, run protocol.RunID, text string) error {
	if _, err := os.Stat(logbookFile(data)); err != nil {
		return errUse{fmt.Errorf("no logbook in %s; name the data folder with --data", data)}
	}
	book, err := logbook.OpenForNotes(data)
	if err != nil {
		return err
	}
	defer book.Close()
	return book.AddNote(ctx, run, whoami(), text)
}

type exportCommand struct {
	Data string `default:"gemel-data" placeholder:"DIR" help:"Data folder."`
	Run_ string `name:"run" placeholder:"RUN" help:"The run; without it the last one."`
	To   string `placeholder:"FILE" help:"Where to write; without it standard output."`

	Snapshot string `placeholder:"FILE" help:"Copy the whole logbook, as it is now, into a new file; a daemon may go on writing."`
}

func (exportCommand) Help() string {
	return "Example:\n  gemel export --to night.csv\n\nThe units of all columns stand in the header comment of the file.\n\n  gemel export --snapshot night.db\n\ncopies the whole logbook while a daemon writes it. Never copy the file of a running daemon by other means."
}

func (c *exportCommand) Run(ctx context.Context, con *console) (err error) {
	if c.Snapshot != "" && (c.Run_ != "" || c.To != "") {
		return errUse{errors.New("--snapshot beside other flags; want it alone: it copies all runs")}
	}
	book, err := openBook(c.Data)
	if err != nil {
		return err
	}
	defer book.Close()
	if c.Snapshot != "" {
		return snapshot(ctx, con, book, c.Data, c.Snapshot)
	}
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
