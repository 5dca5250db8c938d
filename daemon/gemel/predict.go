package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"

	"github.com/alecthomas/kong"

	"gemel/sim/source"
)

type predictCommand struct {
	Crystal     string   `placeholder:"NAME" help:"Published set of dispersion formulas, such as bbo-kato-1986; a wrong name lists them."`
	Process     string   `placeholder:"P-SI" help:"Polarisations of pump, signal and idler: e-oo, e-oe, e-eo, o-ee, o-oe, o-eo (e-oo, in positive crystals o-ee)."`
	Pump        quantity `placeholder:"LENGTH" help:"Vacuum wavelength of the pump, such as \"405 nm\"."`
	Cut         quantity `placeholder:"ANGLE" help:"Optic axis to face normal, such as \"29.2 deg\"."`
	Signal      quantity `placeholder:"LENGTH" help:"Vacuum wavelength of the signal (twice the pump's, or the centre of the signal arm's filter)."`
	Tilt        quantity `placeholder:"ANGLE" help:"Of the crystal; positive turns the optic axis away from the pump (0 deg)."`
	Azimuth     quantity `placeholder:"ANGLE" help:"Of the signal about the pump, from the side of the optic axis (0 deg)."`
	Temperature quantity `placeholder:"T" help:"Of the crystal (the set's own, \"20 Cel\" for most)."`
	Thickness   quantity `placeholder:"LENGTH" help:"Of the crystal, along the face normal (2 mm)."`
	Waist       quantity `placeholder:"LENGTH" help:"1/e² intensity radius of the pump in the crystal (100 um)."`
	Poling      quantity `placeholder:"LENGTH" help:"Period of a poled crystal, along the face normal (none)."`
	Extrapolate bool     `help:"Evaluate a set outside its published range, and say so."`

	Bench string `placeholder:"FILE" help:"Take what no flag says from a bench file's optics, and its arms' apertures and filters too."`
	JSON  bool   `name:"json" help:"Print the answer as one JSON object."`
	Plot  string `placeholder:"FILE.svg" help:"Draw external angle against wavelength, for both photons, with what the arms take."`
	Batch bool   `help:"Answer JSON jobs on standard input, one a line, with these flags' names; one line each, in order."`
}

// quantity is a flag's text, which may begin with a minus: --tilt "-2 deg".
type quantity string

// Decode takes the next word for the value, unless it is a flag.
func (q *quantity) Decode(ctx *kong.DecodeContext) error {
	token := ctx.Scan.Pop()
	text, ok := token.Value.(string)
	if !ok || token.IsEOL() || strings.HasPrefix(text, "--") && token.InferredType() == kong.FlagToken {
		return fmt.Errorf("nothing; want a value with its unit, such as %s", map[string]string{"ANGLE": `"29.2 deg"`, "T": `"20 Cel"`, "LENGTH": `"405 nm"`}[ctx.Value.Tag.PlaceHolder])
	}
	*q = quantity(text)
	return nil
}

func (predictCommand) Help() string {
	return `Where do the photons go? Angles outside are counted from the pump.

Examples:
  gemel predict --crystal bbo-kato-1986 --pump "405 nm" --cut "29.2 deg" --thickness "2 mm" --waist "100 um"
  gemel predict --bench configs/demo-bench.yaml --plot emission.svg
  echo '{"crystal": "bbo-kato-1986", "pump": "405 nm", "cut": "29.2 deg", "signal": "780 nm"}' | gemel predict --batch

What has a default shows it in brackets. Every quantity carries its unit. No emission is an answer: the exit code is 0, roots is empty and because says why.`
}

func (c *predictCommand) Run(_ context.Context, con *console) error {
	var known source.Query
	if c.Bench != "" {
		f, err := loadBench(c.Bench)
		if err != nil {
			return err
		}
		optics, err := f.Source()
		if err != nil {
			return err
		}
		known = source.Ask(optics)
	}
	job := source.Job{Crystal: c.Crystal, Process: c.Process, Pump: string(c.Pump), Cut: string(c.Cut), Signal: string(c.Signal), Tilt: string(c.Tilt), Azimuth: string(c.Azimuth),
		Temperature: string(c.Temperature), Thickness: string(c.Thickness), Waist: string(c.Waist), Poling: string(c.Poling), Extrapolate: c.Extrapolate}
	if c.Batch {
		if job != (source.Job{}) || c.Plot != "" {
			return errUse{errors.New("--batch beside flags of a single question; want jobs on standard input, and at most --bench for what they leave out")}
		}
		return source.Batch(con.in, con.out, known)
	}
	q, err := job.Query(known)
	if err != nil {
		return errUse{err}
	}
	q.Tuning = true
	p, err := source.Predict(q)
	if err != nil {
		return errUse{err}
	}
	if c.Plot != "" {
		if err := writePicture(c.Plot, func(w io.Writer) error { return source.Plot(w, q) }); err != nil {
			return err
		}
	}
	if c.JSON {
		return con.json(p)
	}
	_, err = fmt.Fprint(con.out, p.Table())
	return err
}

// writePicture writes a picture beside its place and moves it there: nobody sees half of it.
func writePicture(path string, draw func(io.Writer) error) (err error) {
	f, err := os.CreateTemp(filepath.Dir(path), ".gemel-plot-*")
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(f.Name()))
		}
	}()
	if err := errors.Join(draw(f), f.Chmod(0o644), f.Close()); err != nil {
		return err
	}
	return os.Rename(f.Name(), path)
}
