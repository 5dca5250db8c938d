package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"

	"gemel/sim/source"
)

type predictCommand struct {
	Crystal     string `placeholder:"NAME" help:"Published set of dispersion formulas, such as bbo-kato-1986; a wrong name lists them."`
	Process     string `placeholder:"P-SI" help:"Polarisations of pump, signal and idler: e-oo, e-oe, e-eo, o-ee, o-oe, o-eo (e-oo, in positive crystals o-ee)."`
	Pump        string `placeholder:"LENGTH" help:"Vacuum wavelength of the pump, such as \"405 nm\"."`
	Cut         string `placeholder:"ANGLE" help:"Optic axis to face normal, such as \"29.2 deg\"."`
	Signal      string `placeholder:"LENGTH" help:"Vacuum wavelength of the signal (twice the pump's, or the centre of the signal arm's filter)."`
	Tilt        string `placeholder:"ANGLE" help:"Of the crystal; positive turns the optic axis away from the pump (0 deg)."`
	Azimuth     string `placeholder:"ANGLE" help:"Of the signal about the pump, from the side of the optic axis (0 deg)."`
	Temperature string `placeholder:"T" help:"Of the crystal (the set's own, \"20 Cel\" for most)."`
	Thickness   string `placeholder:"LENGTH" help:"Of the crystal, along the face normal (2 mm)."`
	Waist       string `placeholder:"LENGTH" help:"1/e² intensity radius of the pump in the crystal (100 um)."`
	Poling      string `placeholder:"LENGTH" help:"Period of a poled crystal, along the face normal (none)."`
	Extrapolate bool   `help:"Evaluate a set outside its published range, and say so."`

	Bench string `placeholder:"FILE" help:"Take what no flag says from a bench file's optics, and its arms' apertures and filters too."`
	JSON  bool   `name:"json" help:"Print the answer as one JSON object."`
	Plot  string `placeholder:"FILE.svg" help:"Draw external angle against wavelength, for both photons, with what the arms take."`
	Batch bool   `help:"Answer JSON jobs on standard input, one a line, with these flags' names; one line each, in order."`
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
	job := source.Job{Crystal: c.Crystal, Process: c.Process, Pump: c.Pump, Cut: c.Cut, Signal: c.Signal, Tilt: c.Tilt, Azimuth: c.Azimuth,
		Temperature: c.Temperature, Thickness: c.Thickness, Waist: c.Waist, Poling: c.Poling, Extrapolate: c.Extrapolate}
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
		if err := plot(c.Plot, q); err != nil {
			return err
		}
	}
	if c.JSON {
		return con.json(p)
	}
	_, err = fmt.Fprint(con.out, p.Table())
	return err
}

// plot writes the picture beside its place and moves it there: nobody sees half of it.
func plot(path string, q source.Query) (err error) {
	f, err := os.CreateTemp(filepath.Dir(path), ".gemel-plot-*")
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(f.Name()))
		}
	}()
	if err := errors.Join(source.Plot(f, q), f.Chmod(0o644), f.Close()); err != nil {
		return err
	}
	return os.Rename(f.Name(), path)
}
