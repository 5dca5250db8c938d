package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"

	"gemel/daemon/bench"
	"gemel/daemon/crew"
	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

type simCommand struct {
	Bench    string `required:"" placeholder:"FILE" help:"Bench file with simulated lines."`
	Lines    string `placeholder:"DIR" help:"Folder for the links to the devices, one a line; made up if not given."`
	Ledger   string `placeholder:"FILE" help:"Write what truly happens, one JSON object a line."`
	Troubles string `placeholder:"LIST" help:"What goes wrong, such as \"late(counter, answer 412, by 230ms); lamp(at 2h13m, for 40s, rate 250000 Hz)\"."`
}

func (simCommand) Help() string {
	return `Example:
  gemel sim --bench configs/demo-bench.yaml --lines /tmp/skerry --ledger truth.jsonl
  gemel run --bench configs/demo-bench.yaml --recipe configs/demo-recipe.yaml --lines /tmp/skerry

Any program may open a device and ask *IDN?.`
}

func (c *simCommand) Run(ctx context.Context, con *console) (err error) {
	f, err := bench.Load(c.Bench)
	if err != nil {
		return err
	}
	list, err := trouble.Parse(c.Troubles)
	if err != nil {
		return errUse{err}
	}
	folder := c.Lines
	if folder == "" {
		if folder, err = os.MkdirTemp("", "gemel-lines-"); err != nil {
			return err
		}
		defer os.RemoveAll(folder)
	}
	// What a killed one left leads to terminals that are gone, or to somebody else's by now.
	for _, l := range f.Lines {
		_ = os.Remove(filepath.Join(folder, l.Name))
	}
	var out io.Writer
	if c.Ledger != "" {
		file, err := os.OpenFile(c.Ledger, os.O_WRONLY|os.O_CREATE|os.O_APPEND, 0o644)
		if err != nil {
			return err
		}
		defer func() { err = errors.Join(err, file.Close()) }()
		out = file
	}
	ledger := instruments.WriteOnly(out)
	v, err := bench.NewVirtual(f, bench.VirtualOptions{Troubles: list, Ledger: ledger, Folder: folder})
	if err != nil {
		return err
	}
	if strange := v.World.Strangers(); len(strange) > 0 {
		return errUse{fmt.Errorf("--troubles: %s would never happen: this bench has no such device or axis; want the names of its controllers, counter, shutters, axes, and of the lines of its meters", strange)}
	}
	g := crew.New(ctx, nil)
	for _, a := range v.Actors() {
		g.Go(a.Name, a.Run)
	}
	addresses, err := v.Addresses(g.Context())
	if err == nil {
		for _, a := range addresses {
			fmt.Fprintf(con.out, "%s %s\n", a.Line, a.Path)
		}
	}
	if err := g.Wait(); err != nil {
		return err
	}
	v.World.Settle()
	return ledger.Err()
}
