package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/keeper"
	"gemel/daemon/logbook"
	"gemel/daemon/remote"
	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
	"gemel/scan/engine"
	"gemel/scan/forecast"
	"gemel/scan/recipe"
)

type forecastCommand struct {
	Bench  string `required:"" placeholder:"FILE" help:"Bench file."`
	Recipe string `required:"" placeholder:"FILE" help:"Recipe file."`
	Aim    string `placeholder:"U" help:"Standard uncertainty that is wanted, such as \"0.5 %\" or \"0.01 deg\": says the dwell that each point needs."`
	From   string `placeholder:"RUN" help:"Take rates and overheads from an earlier run instead of the model."`
	Data   string `placeholder:"DIR" help:"Data folder of that run, and of earlier results (the bench file's, else gemel-data)."`
	Plot   string `placeholder:"FILE.svg" help:"Draw the night: angle across, time downward."`
	JSON   bool   `name:"json" help:"Print the forecast as one JSON object, every point in it."`
}

func (forecastCommand) Help() string {
	return `What will this recipe do, how long does it take, and what will it be worth? Nothing moves, and no instrument is needed.

Examples:
  gemel forecast --bench configs/demo-bench.yaml --recipe configs/recipes/efficiency.yaml
  gemel forecast --bench configs/demo-bench.yaml --recipe configs/recipes/efficiency.yaml --aim "0.5 %"
  gemel forecast --bench configs/demo-bench.yaml --recipe configs/demo-recipe.yaml --plot night.svg

It takes for granted that every reading succeeds at once, that no guard breaks and that the bench is as its file says. Warnings do not change the exit code.`
}

func (c *forecastCommand) Run(ctx context.Context, con *console) error {
	err := c.run(ctx, con)
	if e, bad := errors.AsType[*strict.Error](err); bad && c.JSON {
		if err := con.json(map[string]any{"sound": []string{}, "findings": e.Findings}); err != nil {
			return err
		}
		return errNotFinished
	}
	return err
}

func (c *forecastCommand) run(ctx context.Context, con *console) error {
	if err := plottable(c.Plot); err != nil {
		return err
	}
	file, err := loadBench(c.Bench)
	if err != nil {
		return err
	}
	r, err := recipe.Load(c.Recipe)
	if err != nil {
		return err
	}
	o := report.Foreseen{Begins: time.Now()}
	if c.Aim != "" {
		aim, err := forecast.ParseAim(c.Aim)
		if err != nil {
			return errUse{err}
		}
		o.Aim = &aim
	}
	f, err := c.work(ctx, file, r, o)
	if err != nil {
		return err
	}
	if c.Plot != "" {
		if err := writePicture(c.Plot, f.Draw); err != nil {
			return err
		}
	}
	if c.JSON {
		out := f.Forecast
		out.PointList = f.List()
		return con.json(out)
	}
	_, err = io.WriteString(con.out, f.Text())
	return err
}

// plottable says before any work whether a picture can be written there.
func plottable(path string) error {
	if path == "" {
		return nil
	}
	if ending := filepath.Ext(path); !strings.EqualFold(ending, ".svg") {
		return errUse{fmt.Errorf("--plot %s: pictures are SVG; want a name that ends in .svg", path)}
	}
	if at, err := os.Stat(filepath.Dir(path)); err != nil || !at.IsDir() {
		return errUse{fmt.Errorf("--plot %s: no folder %s; want one that exists", path, filepath.Dir(path))}
	}
	return nil
}

// foreseer makes the forecasts that a daemon is asked for.
func foreseer(file *bench.File) func(context.Context, scan.Plan, time.Time, string) (protocol.Forecast, error) {
	return func(_ context.Context, plan scan.Plan, begins time.Time, asked string) (protocol.Forecast, error) {
		o := report.Foreseen{Begins: begins}
		if asked != "" {
			aim, err := forecast.ParseAim(asked)
			if err != nil {
				return protocol.Forecast{}, protocol.Refuse(400, err.Error())
			}
			if err := aim.Fits(plan.Results); err != nil {
				return protocol.Forecast{}, protocol.Refuse(400, err.Error())
			}
			o.Aim = &aim
		}
		f, err := report.Forecast(file, plan, o)
		if err != nil {
			return protocol.Forecast{}, err
		}
		out := f.Forecast
		if f.Points+f.PointsAdded <= remote.MostPoints {
			out.PointList = f.List()
		} else {
			out.PointListLeftOut = fmt.Sprintf("%d points; more than %d are not listed in a message", f.Points+f.PointsAdded, remote.MostPoints)
		}
		return out, nil
	}
}

// work plans the recipe with what the data folder knows of earlier results, if there is one.
func (c *forecastCommand) work(ctx context.Context, file *bench.File, r *recipe.Recipe, o report.Foreseen) (*forecast.Forecast, error) {
	facts := file.Facts()
	facts.AcceptedAt = o.Begins.In(time.Local)
	data := logbookFile(orElse(c.Data, orElse(file.LogbookFolder, "gemel-data")))
	_, err := os.Stat(data)
	switch {
	case err == nil:
		book, err := logbook.OpenReadOnly(data)
		if err != nil {
			return nil, err
		}
		defer book.Close()
		facts.Earlier = keeper.New(keeper.Config{Book: book, Bench: &engine.Bench{Name: file.Name}, BenchText: file.Text, Declared: declared}).Earlier(ctx)
		if c.From != "" {
			if o.Earlier, err = report.FromRun(ctx, book, protocol.RunID(c.From), file); err != nil {
				return nil, err
			}
		}
	case c.From != "" || c.Data != "":
		return nil, errUse{fmt.Errorf("%s: %w; want --data with the folder of a run", data, err)}
	}
	plan, err := r.Plan(facts)
	if err != nil {
		return nil, err
	}
	if o.Aim != nil {
		if err := o.Aim.Fits(plan.Results); err != nil {
			return nil, errUse{err}
		}
	}
	return report.Forecast(file, plan, o)
}
