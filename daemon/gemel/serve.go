package main

import (
	"context"
	"fmt"

	"github.com/rs/zerolog"

	"gemel/scan/engine"
)

type serveCommand struct {
	benchFlags
	Recipes string `placeholder:"DIR" help:"Folder of recipes that others may start by name."`
}

func (serveCommand) Help() string {
	return `Example:
  gemel serve --bench configs/demo-bench.yaml --recipes configs
  gemel start --recipe configs/demo-recipe.yaml      (in a second shell)

Ctrl-C and SIGTERM bring the bench to rest and leave the run unfinished; the next start goes on with it as the bench file's after_restart says.`
}

func (c *serveCommand) Run(ctx context.Context, con *console) error {
	log := newLog(con, zerolog.InfoLevel)
	s, err := open(ctx, c.benchFlags, c.Recipes, false, log)
	if err != nil {
		return err
	}
	defer s.close()
	con.caution(s.file)
	s.keeper.Serving = func() {
		log.Info().Str("bench", s.file.Name).Str("url", s.broker.Contact().URL).Str("data", s.data).Msg("serving")
	}
	fated, done := s.fated(ctx)
	defer done()
	if err := s.keeper.Run(fated); err != nil {
		return err
	}
	if ctx.Err() == nil {
		return context.Cause(fated)
	}
	if snap := s.keeper.Status(ctx); snap.State != "" && !snap.State.Final() {
		fmt.Fprintf(con.err, "run %s goes on at the next start\n", snap.Run)
	}
	log.Info().Str("because", engine.ErrShutdown.Error()).Msg("at rest")
	return nil
}
