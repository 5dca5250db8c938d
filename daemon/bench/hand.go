package bench

import (
	"context"
	"errors"
	"math"

	"gemel/drivers"
	"gemel/scan/engine"
)

// Release closes every line and keeps it closed until Take, so that another program may use the
// instruments. If one cannot be let go all are taken back.
func (b *Bench) Release(ctx context.Context) error {
	var errs []error
	for _, l := range b.Lines {
		errs = append(errs, l.Release(ctx))
	}
	err := errors.Join(errs...)
	if err != nil {
		b.Take()
	}
	return err
}

// Take lets every line be opened again, by the devices that connect.
func (b *Bench) Take() {
	for _, l := range b.Lines {
		l.Take()
	}
}

// Hand is what hand work has to know of this bench.
func (b *Bench) Hand() engine.HandFacts {
	c := b.File.Counter
	facts := engine.HandFacts{Lines: b, Limits: map[drivers.DeviceName][2]float64{}, GateMin: c.GateMin, GateMax: c.GateMax}
	for _, s := range b.File.Settings {
		if !math.IsInf(s.Low, 0) || !math.IsInf(s.High, 0) {
			facts.Limits[s.Name] = [2]float64{s.Low, s.High}
		}
	}
	for _, channel := range c.Channels {
		if of, pairs := c.Coincidences[channel]; pairs {
			facts.Pairs = append(facts.Pairs, engine.HandPairs{Channel: channel, Of: of, Window: c.Window.Value})
		}
	}
	return facts
}
