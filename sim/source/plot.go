package source

import (
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"gemel/sim/phasematch"
)

// Plot draws external angle against wavelength: the signal (S, a solid line) upwards, the idler (I,
// a broken one) downwards, both from the pump in the middle. Where optics are given, what an arm
// takes (its aperture's angle by its filter's band, standing on the bare emission) is a hatched
// patch. One ink.
func Plot(w io.Writer, q Query) error {
	if err := q.Slab.Check(); err != nil {
		return err
	}
	const width, height, left, right, top, bottom = 760., 540., 64., 34., 66., 50.
	loNm, hiNm := q.span()
	if !(loNm < hiNm) {
		return fmt.Errorf("source: %s holds no signal and idler of a pump of %g nm; want another set, or extrapolation", q.Slab.Crystal.Name, q.Slab.PumpNm)
	}
	const points = 161
	wavelengths := make([]float64, points)
	for i := range wavelengths {
		wavelengths[i] = loNm + (hiNm-loNm)*float64(i)/(points-1)
	}
	curve := q.curve(q.closer(wavelengths))
	arms := q.patches(loNm, hiNm)
	highest := 1.0
	for _, t := range curve {
		highest = max(highest, t.SignalExternalDeg)
		if t.IdlerExternalDeg != nil {
			highest = max(highest, *t.IdlerExternalDeg)
		}
	}
	for _, a := range arms {
		highest = max(highest, math.Abs(a.deg)+a.openDeg)
	}
	highest = math.Min(90, math.Ceil(highest*1.1))
	x := func(nm float64) float64 { return left + (nm-loNm)/(hiNm-loNm)*(width-left-right) }
	y := func(deg float64) float64 { return top + (highest-deg)/(2*highest)*(height-top-bottom) }

	var b strings.Builder
	line := func(format string, a ...any) { fmt.Fprintf(&b, format+"\n", a...) }
	line(`<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 %g %g" font-family="sans-serif" font-size="12" fill="none" stroke="#222">`, width, height)
	line(`<defs><pattern id="hatch" width="5" height="5" patternUnits="userSpaceOnUse" patternTransform="rotate(45)"><path d="M0 0V5" stroke-width="0.8"/></pattern></defs>`)
	line(`<rect x="0" y="0" width="%g" height="%g" fill="#fff" stroke="none"/>`, width, height)
	// Letters stand on paper, whatever line passes behind them.
	text := func(px, py float64, anchor, s string) {
		line(`<text x="%.1f" y="%.1f" text-anchor="%s" fill="#222" stroke="#fff" stroke-width="4" stroke-linejoin="round" paint-order="stroke">%s</text>`, px, py, anchor, escape(s))
	}
	a := q.asked()
	text(left, 18, "start", fmt.Sprintf("%s, %s, %g nm, cut %g deg, tilt %g deg, azimuth %g deg, %g Cel", a.Crystal, a.Process, a.PumpNm, a.CutDeg, a.TiltDeg, a.AzimuthDeg, a.Cel))
	key := "S signal, solid, upwards; I idler, broken, downwards; circles: the pair asked for"
	if len(arms) > 0 {
		key += "; hatched: what an arm takes"
	}
	text(left, 36, "start", key)
	for _, nm := range ticks(loNm, hiNm) {
		line(`<path d="M%.1f %.1fv5" stroke-width="0.8"/>`, x(nm), height-bottom)
		text(x(nm), height-bottom+18, "middle", fmt.Sprintf("%g", nm))
	}
	for _, a := range ticks(-highest, highest) {
		line(`<path d="M%.1f %.1fh-5" stroke-width="0.8"/>`, left, y(a))
		text(left-9, y(a)+4, "end", fmt.Sprintf("%g", math.Abs(a)))
	}
	line(`<path d="M%.1f %.1fV%.1fH%.1f" stroke-width="0.8"/>`, left, top, height-bottom, width-right)
	text((left+width-right)/2, height-10, "middle", "vacuum wavelength / nm")
	line(`<g transform="translate(18 %.1f) rotate(-90)">`, y(0))
	text(0, 0, "middle", "angle outside, from the pump / deg")
	line(`</g>`)
	line(`<path d="M%.1f %.1fH%.1f" stroke-width="2.4"/>`, left, y(0), width-right)
	text(left+8, y(0)-7, "start", "pump")
	for _, a := range arms {
		line(`<rect x="%.1f" y="%.1f" width="%.1f" height="%.1f" fill="url(#hatch)" stroke-width="0.8"/>`, x(a.loNm), y(a.deg+a.openDeg), x(a.hiNm)-x(a.loNm), y(a.deg-a.openDeg)-y(a.deg+a.openDeg))
	}
	// A curve breaks where neighbours have no emission, and the two roots of one wavelength lie on
	// different branches: points are joined to the nearest of the wavelength before.
	draw := func(letter, dash string, at func(Tuned) (nm, angle float64, ok bool)) {
		type open struct {
			nm, angle float64
			path      strings.Builder
		}
		var branches []*open
		var lastNm, lastDeg float64 // the rightmost point, where the letter goes
		gap := 1.6 * (hiNm - loNm) / (points - 1)
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
			if nm > lastNm {
				lastNm, lastDeg = nm, a
			}
		}
		for _, c := range branches {
			line(`<path d="%s" stroke-width="1.4"%s/>`, c.path.String(), dash)
		}
		if lastNm > 0 {
			line(`<text x="%.1f" y="%.1f" font-family="serif" font-size="17" fill="#222" stroke="none">%s</text>`, x(lastNm)+8, y(lastDeg)+5, letter)
		}
	}
	draw("S", "", func(t Tuned) (float64, float64, bool) { return t.SignalNm, t.SignalExternalDeg, true })
	draw("I", ` stroke-dasharray="6 3"`, func(t Tuned) (float64, float64, bool) {
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
				line(`<circle cx="%.1f" cy="%.1f" r="3.4" fill="#fff"/>`, x(idler), y(-r.Idler.PolarDeg))
			}
		}
		if e.N == 0 {
			text((left+width-right)/2, y(0)-24, "middle", "no emission: "+e.Because())
		}
	}
	// What the arms are called stands between them and the pump.
	for _, a := range arms {
		at := y(a.deg-a.openDeg) + 16
		if a.deg < 0 {
			at = y(a.deg+a.openDeg) - 8
		}
		text(min(max((x(a.loNm)+x(a.hiNm))/2, left+110), width-right-110), at, "middle", a.name)
	}
	line(`</svg>`)
	_, err := io.WriteString(w, b.String())
	return err
}

// closer adds wavelengths where the number of directions changes, so that two branches meet.
func (q *Query) closer(wavelengths []float64) (out []float64) {
	roots := func(nm float64) int {
		pair, err := q.Slab.At(nm)
		if err != nil {
			return 0
		}
		return pair.Emission(q.AzimuthDeg).N
	}
	for i, nm := range wavelengths {
		out = append(out, nm)
		if i+1 == len(wavelengths) || roots(nm) == roots(wavelengths[i+1]) {
			continue
		}
		lo, hi := nm, wavelengths[i+1]
		for range 12 {
			mid := (lo + hi) / 2
			out = append(out, mid)
			if roots(mid) == roots(nm) {
				lo = mid
			} else {
				hi = mid
			}
		}
	}
	slices.Sort(out)
	return out
}

// patch is what one arm takes.
type patch struct {
	name         string
	deg, openDeg float64 // downwards negative
	loNm, hiNm   float64
}

// patches are what the arms of a bench take, none where it has no pairs to take.
func (q *Query) patches(loNm, hiNm float64) (out []patch) {
	if q.Optics == nil {
		return nil
	}
	m, err := New(*q.Optics)
	if err != nil {
		return nil
	}
	s, i, err := m.bare(q.Slab.TiltDeg)
	if err != nil {
		return nil
	}
	for k, a := range []*Arm{&m.o.Signal, &m.o.Idler} {
		p := patch{deg: []float64{s, -i}[k], openDeg: math.Atan(a.RadiusMm/a.DistanceMm) / deg, loNm: loNm, hiNm: hiNm}
		band := "no filter"
		if f := a.Filter; f.WidthNm > 0 {
			band = fmt.Sprintf("%g ± %g nm", f.CentreNm, tidy(f.WidthNm/2))
			p.loNm, p.hiNm = min(max(loNm, f.CentreNm-f.WidthNm/2), hiNm), max(min(hiNm, f.CentreNm+f.WidthNm/2), loNm)
		}
		p.name = fmt.Sprintf("%s arm: %.3f ± %.3f deg, %s", []string{"signal", "idler"}[k], math.Abs(p.deg), p.openDeg, band)
		out = append(out, p)
	}
	return out
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
