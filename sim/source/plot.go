package source

import (
	"fmt"
	"io"
	"math"
	"strings"

	"gemel/sim/phasematch"
)

// Plot draws external angle against wavelength: the signal upwards, the idler downwards, both from
// the pump in the middle, as one line each. Where optics are given, what an arm takes (its
// aperture's angle by its filter's band, standing at the reference) is a hatched patch. One ink.
func Plot(w io.Writer, q Query) error {
	if err := q.Slab.Check(); err != nil {
		return err
	}
	q.TuningPoints = 161
	curve := q.tuning(q.TuningPoints)
	const width, height, left, right, top, bottom = 760., 520., 64., 20., 34., 46.
	loNm, hiNm := q.Slab.Band()
	loNm, hiNm = max(loNm, 1.4*q.Slab.PumpNm), min(hiNm, 3.2*q.Slab.PumpNm)
	highest := 1.0
	for _, t := range curve {
		highest = max(highest, t.SignalExternalDeg)
		if t.IdlerExternalDeg != nil {
			highest = max(highest, *t.IdlerExternalDeg)
		}
	}
	highest = math.Min(90, math.Ceil(highest*1.1))
	x := func(nm float64) float64 { return left + (nm-loNm)/(hiNm-loNm)*(width-left-right) }
	y := func(deg float64) float64 { return top + (highest-deg)/(2*highest)*(height-top-bottom) }

	var b strings.Builder
	line := func(format string, a ...any) { fmt.Fprintf(&b, format+"\n", a...) }
	line(`<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 %g %g" font-family="sans-serif" font-size="12" fill="none" stroke="#222">`, width, height)
	line(`<defs><pattern id="hatch" width="5" height="5" patternUnits="userSpaceOnUse" patternTransform="rotate(45)"><path d="M0 0V5" stroke-width="0.8"/></pattern></defs>`)
	line(`<rect x="0" y="0" width="%g" height="%g" fill="#fff" stroke="none"/>`, width, height)
	text := func(px, py float64, anchor, s string) {
		line(`<text x="%.1f" y="%.1f" text-anchor="%s" fill="#222" stroke="none">%s</text>`, px, py, anchor, escape(s))
	}
	for _, nm := range ticks(loNm, hiNm) {
		line(`<path d="M%.1f %.1fv5" stroke-width="0.8"/>`, x(nm), height-bottom)
		text(x(nm), height-bottom+18, "middle", fmt.Sprintf("%g", nm))
	}
	for _, a := range ticks(-highest, highest) {
		line(`<path d="M%.1f %.1fh-5" stroke-width="0.8"/>`, left, y(a))
		text(left-9, y(a)+4, "end", fmt.Sprintf("%g", math.Abs(a)))
	}
	line(`<path d="M%.1f %.1fV%.1fH%.1f" stroke-width="0.8"/>`, left, top, height-bottom, width-right)
	line(`<path d="M%.1f %.1fH%.1f" stroke-width="2.4"/>`, left, y(0), width-right)
	text(width-right, y(0)-6, "end", "pump")
	text((left+width-right)/2, height-8, "middle", "vacuum wavelength, nm")
	text(12, top-14, "start", "external angle, deg: signal up, idler down")

	if o := q.Optics; o != nil {
		m, err := New(*o)
		if err != nil {
			return err
		}
		s, i := m.Reference()
		for k, a := range []*Arm{&o.Signal, &o.Idler} {
			at, sign, name := s, 1.0, "signal arm"
			if k == 1 {
				at, sign, name = i, -1, "idler arm"
			}
			open := math.Atan(a.RadiusMm/a.DistanceMm) / deg
			lo, hi := loNm, hiNm
			if a.Filter.WidthNm > 0 {
				lo, hi = max(lo, a.Filter.CentreNm-a.Filter.WidthNm/2), min(hi, a.Filter.CentreNm+a.Filter.WidthNm/2)
			}
			y0, y1 := y(sign*at+open), y(sign*at-open)
			line(`<rect x="%.1f" y="%.1f" width="%.1f" height="%.1f" fill="url(#hatch)" stroke-width="0.8"/>`, x(lo), y0, x(hi)-x(lo), y1-y0)
			text(x(hi)+5, (y0+y1)/2+4, "start", name)
		}
	}
	// A curve breaks where neighbours have no emission, and the two roots of one wavelength lie on
	// different branches: points are joined to the nearest of the wavelength before.
	draw := func(dash string, at func(Tuned) (nm, angle float64, ok bool)) {
		type open struct {
			nm, angle float64
			path      strings.Builder
		}
		var branches []*open
		gap := 1.6 * (hiNm - loNm) / float64(q.TuningPoints-1)
		for _, t := range curve {
			nm, a, ok := at(t)
			if !ok || nm < loNm || nm > hiNm {
				continue
			}
			var best *open
			for _, c := range branches {
				if c.nm != nm && math.Abs(c.nm-nm) < 4*gap && math.Abs(c.angle-a) < 0.25*highest && (best == nil || math.Abs(c.angle-a) < math.Abs(best.angle-a)) {
					best = c
				}
			}
			if best == nil {
				best = &open{}
				branches = append(branches, best)
				fmt.Fprintf(&best.path, "M%.1f %.1f", x(nm), y(a))
			} else {
				fmt.Fprintf(&best.path, "L%.1f %.1f", x(nm), y(a))
			}
			best.nm, best.angle = nm, a
		}
		for _, c := range branches {
			line(`<path d="%s" stroke-width="1.4"%s/>`, c.path.String(), dash)
		}
	}
	draw("", func(t Tuned) (float64, float64, bool) { return t.SignalNm, t.SignalExternalDeg, true })
	draw(` stroke-dasharray="6 3"`, func(t Tuned) (float64, float64, bool) {
		if t.IdlerExternalDeg == nil {
			return 0, 0, false
		}
		return t.IdlerNm, -*t.IdlerExternalDeg, true
	})
	// The pair that was asked for.
	if pair, err := q.Slab.At(q.SignalNm); err == nil {
		e := pair.Emission(q.AzimuthDeg)
		for _, r := range e.Root[:e.N] {
			line(`<circle cx="%.1f" cy="%.1f" r="3.4" fill="#222"/>`, x(q.SignalNm), y(r.Signal.PolarDeg))
			if !r.Idler.ReflectedBack {
				idler := phasematch.Idler(q.Slab.PumpNm, q.SignalNm)
				line(`<circle cx="%.1f" cy="%.1f" r="3.4"/>`, x(idler), y(-r.Idler.PolarDeg))
			}
		}
		if e.N == 0 {
			text((left+width-right)/2, y(0)-24, "middle", "no emission: "+e.Because())
		}
	}
	line(`</svg>`)
	_, err := io.WriteString(w, b.String())
	return err
}

// ticks are five to ten round numbers between two.
func ticks(lo, hi float64) []float64 {
	step := math.Pow(10, math.Floor(math.Log10((hi-lo)/5)))
	for _, k := range []float64{5, 2} {
		if (hi-lo)/(k*step) >= 5 {
			step *= k
			break
		}
	}
	var out []float64
	for v := math.Ceil(lo/step) * step; v <= hi; v += step {
		out = append(out, math.Round(v/step)*step)
	}
	return out
}

func escape(s string) string {
	return strings.NewReplacer("&", "&amp;", "<", "&lt;", ">", "&gt;").Replace(s)
}
