package report

import (
	"errors"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"

	"gemel/scan"
	"gemel/scan/estimate"
)

// ErrNothingToDraw is returned where no result of a run has a value that a picture could show.
var ErrNothingToDraw = errors.New("no result of this run has a value to draw")

// The sheet, in units of the picture: as wide as a telephone shows letters of this size readably.
const (
	sheetWidth               = 480.
	left, right              = 80., 16.
	margin                   = 16.
	mainHeight, residualHigh = 230., 70.
	fontSize                 = 13.
	lineHigh                 = 17.
	letterWide               = 0.6 * fontSize // of the widest of the usual sans-serif faces, on average
	wrapAt                   = 58             // letters in a line
	titleAt                  = 44             // in a title, which is larger
)

// Picture is what can be drawn of one result.
type Picture struct {
	Number int // the result's place in the recipe, from 1
	Kind   string
	result estimate.Result
	beside Beside
}

// Pictures lists what can be drawn of a run's results, in the recipe's order. One that has no value has
// no picture.
func Pictures(all []estimate.Result, beside Beside) []Picture {
	var list []Picture
	for i, r := range all {
		p := Picture{i + 1, r.Kind, r, beside}
		if _, ok := pictureOf(r); ok || r.Value != nil && (r.Drift != nil || r.Kind == string(scan.Efficiency)) {
			list = append(list, p)
		}
	}
	return list
}

// Draw draws the result as an SVG picture under its name, value and sentence, in one ink. Of a profile
// or a curve: readings as circles with their counting uncertainty, the fit as a line, what was
// predicted as a broken one, and what the fit leaves below it. Of an efficiency: the plateau, the
// budget in quadrature and the spine of the night. Of a drift: each quantity of the references against
// time, with its line, its bounds and what the run called bad.
func (p Picture) Draw(w io.Writer) error {
	s := &sheet{}
	s.title(p.result, p.beside.title())
	switch {
	case p.result.Drift != nil:
		s.drift(*p.result.Drift, p.beside)
	case p.result.Kind == string(scan.Efficiency):
		if one, ok := pictureOf(p.result); ok {
			s.draw(one)
		} else if one, ok := p.beside.plateau(p.result, p.Number-1); ok {
			s.draw(one)
		}
		s.quadrature(p.result)
		s.spine(p.beside)
	default:
		if one, ok := pictureOf(p.result); ok {
			s.draw(one)
		}
	}
	s.y += 16
	_, err := fmt.Fprintf(w, "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 %g %.0f\" font-family=\"sans-serif\" font-size=\"%g\" fill=\"none\" stroke=\"#222\">\n<rect x=\"0\" y=\"0\" width=\"%g\" height=\"%.0f\" fill=\"#fff\" stroke=\"none\"/>\n%s</svg>\n",
		sheetWidth, s.y, fontSize, sheetWidth, s.y, s.b.String())
	return err
}

// picture is readings and lines against one quantity.
type picture struct {
	across, up string // what the axes are, with units
	points     []mark
	fitted     []place // a solid line
	predicted  []place // a broken one
	hairlines  []hairline
	residuals  []place // in units of the uncertainty
	fromZero   bool
	grains     bool // circles are filled where they are not hollow
	key        string
}

type place struct{ x, y float64 }

type mark struct {
	place
	u      float64
	hollow bool // not among those that make the result
}

type hairline struct {
	x    float64
	text string
}

// pictureOf is false where there is nothing to draw.
func pictureOf(r estimate.Result) (picture, bool) {
	switch {
	case r.Value == nil:
		return picture{}, false
	case r.Curve != nil:
		return curved(r), true
	case r.By != nil:
		return bySetting(*r.By), true
	case len(r.Residuals) > 0:
		return profiled(r), true
	}
	return picture{}, false
}

const linePlaces = 700

func profiled(r estimate.Result) picture {
	p := picture{across: "angle / deg", up: "counts / s", fromZero: true,
		key: "Circles: readings less what is known of them (darks, accidentals), with the root of their counts; line: the fit; below: what it leaves, in units of its uncertainty"}
	scale := 1.
	if r.Axis != "" {
		p.across = r.Axis + " / deg"
	}
	if _, unit := r.Residuals[0].Place(); unit == "s" {
		p.across, scale = "delay / ns", 1e9
	}
	rate, _ := r.Lines()
	low, high := math.Inf(1), math.Inf(-1)
	for _, one := range r.Residuals {
		at, _ := one.Place()
		low, high = math.Min(low, at), math.Max(high, at)
		known := 0.
		if rate != nil {
			known = one.Expected/one.ExposureS - rate(at)
		}
		p.points = append(p.points, mark{place{at * scale, one.Counts/one.ExposureS - known}, math.Sqrt(math.Max(one.Counts, 1)) / one.ExposureS, false})
		p.residuals = append(p.residuals, place{at * scale, one.Residual})
	}
	p.fitted = lineOf(rate, low, high, scale)
	switch {
	case r.Zero != nil:
		p.hairlines = []hairline{{r.Zero.LowDeg, fixed(r.Zero.LowDeg, 4)}, {*r.Value, "zero " + fixed(*r.Value, 4)}, {r.Zero.HighDeg, fixed(r.Zero.HighDeg, 4)}}
		// Between the sides nothing was fitted.
		var kept []place
		for _, f := range p.fitted {
			if near(f.x, p.points, (high-low)/25) {
				kept = append(kept, f)
			} else {
				kept = append(kept, place{f.x, math.NaN()})
			}
		}
		p.fitted = kept
	case r.Delay != nil:
		d := r.Delay
		p.hairlines = []hairline{{(d.CentreS - d.WidthS/2) * scale, fixed((d.CentreS-d.WidthS/2)*scale, 3)}, {d.CentreS * scale, "centre " + fixed(d.CentreS*scale, 3)}, {(d.CentreS + d.WidthS/2) * scale, fixed((d.CentreS+d.WidthS/2)*scale, 3)}}
	default:
		p.hairlines = []hairline{{*r.Value, fixed(*r.Value, 4)}}
	}
	return p
}

func lineOf(f func(float64) float64, low, high, scale float64) (line []place) {
	if f == nil {
		return nil
	}
	for i := range linePlaces + 1 {
		at := low + (high-low)*float64(i)/linePlaces
		line = append(line, place{at * scale, f(at)})
	}
	return line
}

func near(x float64, points []mark, within float64) bool {
	for _, m := range points {
		if math.Abs(m.x-x) <= within {
			return true
		}
	}
	return false
}

func curved(r estimate.Result) picture {
	c := r.Curve
	p := picture{across: c.Against + " / deg", up: c.Along + " / deg",
		key: "Circles: fitted angles; broken line: predicted with nothing fitted; line: with the unknowns fitted; below: what is left, in units of its uncertainty"}
	low, high := math.Inf(1), math.Inf(-1)
	for _, one := range c.Places {
		if one.Left != "" {
			continue
		}
		low, high = math.Min(low, one.AgainstDeg), math.Max(high, one.AgainstDeg)
		p.points = append(p.points, mark{place{one.AgainstDeg, one.AngleDeg}, one.U, false})
		p.residuals = append(p.residuals, place{one.AgainstDeg, one.ResidualDeg / one.U})
	}
	fitted, predicted := r.Lines()
	p.fitted, p.predicted = lineOf(fitted, low, high, 1), lineOf(predicted, low, high, 1)
	return p
}

func bySetting(by estimate.BySetting) picture {
	p := picture{across: by.Setting + " / " + by.Unit, up: "efficiency", key: "Circles: one efficiency each, with what counting leaves open; line: fitted to them; below: what it leaves, in units of that"}
	for _, one := range by.Values {
		if one.Value == nil {
			continue
		}
		p.points = append(p.points, mark{place{one.At, *one.Value}, one.OwnU, false})
		p.fitted = append(p.fitted, place{one.At, one.LineAt})
		p.residuals = append(p.residuals, place{one.At, (*one.Value - one.LineAt) / one.OwnU})
	}
	return p
}

// sheet is the picture as far as it is drawn.
type sheet struct {
	b strings.Builder
	y float64
}

func (s *sheet) line(format string, a ...any) { fmt.Fprintf(&s.b, format+"\n", a...) }

// text stands on paper, whatever line passes behind it.
func (s *sheet) text(x, y float64, anchor, text string) { s.lettered(x, y, anchor, "", text) }

func (s *sheet) lettered(x, y float64, anchor, face, text string) {
	s.line(`<text x="%.1f" y="%.1f" text-anchor="%s"%s fill="#222" stroke="#fff" stroke-width="4" stroke-linejoin="round" paint-order="stroke">%s</text>`, x, y, anchor, face,
		strings.NewReplacer("&", "&amp;", "<", "&lt;", ">", "&gt;").Replace(text))
}

// title says what the picture is of, run and value first, and then the whole sentence.
func (s *sheet) title(r estimate.Result, run string) {
	s.y += 10
	quantity := r.Quantity()
	for _, row := range append(wrapped(strings.ToUpper(quantity[:1])+quantity[1:], titleAt), r.Stated()) {
		s.y += 22
		s.lettered(margin, s.y, "start", ` font-size="17" font-weight="bold"`, row)
	}
	s.y += 4
	s.paragraph("run " + string(r.Run) + run)
	s.y += 6
	text := r.Sentence()
	if r.Simulated != nil {
		text += " Simulated."
	}
	s.paragraph(text)
}

func (s *sheet) paragraph(text string) {
	for _, row := range wrapped(text, wrapAt) {
		s.y += lineHigh
		s.text(margin, s.y, "start", row)
	}
}

// heading names a part of the picture.
func (s *sheet) heading(text string) {
	s.y += 14 + lineHigh
	s.lettered(margin, s.y, "start", ` font-weight="bold"`, text)
}

func wrapped(text string, wide int) (rows []string) {
	row := ""
	for word := range strings.FieldsSeq(text) {
		if row != "" && utf8.RuneCountInString(row)+1+utf8.RuneCountInString(word) > wide {
			rows, row = append(rows, row), ""
		}
		if row != "" {
			row += " "
		}
		row += word
	}
	return append(rows, row)
}

func (s *sheet) draw(p picture) {
	s.y += 6
	s.paragraph(p.key + ".")
	top := s.y + 20
	if len(p.hairlines) > 0 {
		top += 26 // their names
	}
	bottom := top + mainHeight
	lowX, highX, lowY, highY := p.bounds()
	x := func(v float64) float64 { return left + (v-lowX)/(highX-lowX)*(sheetWidth-left-right) }
	y := func(v float64) float64 { return bottom - (v-lowY)/(highY-lowY)*mainHeight }
	for _, v := range ticks(lowY, highY, 4) {
		s.line(`<path d="M%.1f %.1fh-5" stroke-width="0.8"/>`, left, y(v))
		s.text(left-9, y(v)+4, "end", plain(v))
	}
	s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.8"/>`, left, top, bottom)
	s.upright(15, (top+bottom)/2, p.up)
	foot := bottom + 18 + residualHigh
	for i, h := range p.hairlines {
		s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.5" stroke-dasharray="1 3"/>`, x(h.x), top-4, bottom)
		// Names of neighbours do not run into one another.
		anchor := "middle"
		if n := len(p.hairlines); n == 3 && x(p.hairlines[2].x)-x(p.hairlines[0].x) < 100 {
			anchor = [3]string{"end", "middle", "start"}[i]
		}
		s.text(x(h.x), top-8-float64(i%2)*15, anchor, h.text)
	}
	s.curve(p.predicted, x, y, ` stroke-dasharray="6 3"`)
	s.curve(p.fitted, x, y, "")
	for _, m := range p.points {
		fill := "#fff"
		if p.grains && !m.hollow {
			fill = "#222"
		}
		s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.7"/><circle cx="%.1f" cy="%.1f" r="2.6" fill="%s"/>`, x(m.x), y(m.y-m.u), y(m.y+m.u), x(m.x), y(m.y), fill)
	}
	// What is left.
	most := 3.
	for _, r := range p.residuals {
		most = math.Max(most, math.Abs(r.y))
	}
	most = math.Ceil(most)
	mid := bottom + 18 + residualHigh/2
	z := func(v float64) float64 { return mid - v/most*residualHigh/2 }
	s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.8"/>`, left, bottom+18, foot)
	for _, v := range []float64{-most, 0, most} {
		s.line(`<path d="M%.1f %.1fh-5" stroke-width="0.8"/>`, left, z(v))
		s.text(left-9, z(v)+4, "end", plain(v))
	}
	s.line(`<path d="M%.1f %.1fH%.1f" stroke-width="0.5"/>`, left, z(0), sheetWidth-right)
	s.upright(15, mid, "left / u")
	for _, r := range p.residuals {
		s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="1.2"/><circle cx="%.1f" cy="%.1f" r="1.3" fill="#222"/>`, x(r.x), z(0), z(r.y), x(r.x), z(r.y))
	}
	s.line(`<path d="M%.1f %.1fH%.1f" stroke-width="0.8"/>`, left, foot, sheetWidth-right)
	for _, v := range spaced(lowX, highX, sheetWidth-left-right) {
		s.line(`<path d="M%.1f %.1fv5" stroke-width="0.8"/>`, x(v), foot)
		s.text(x(v), foot+18, "middle", plain(v))
	}
	s.text((left+sheetWidth-right)/2, foot+36, "middle", p.across)
	s.y = foot + 42
}

func (s *sheet) upright(x, y float64, text string) {
	s.line(`<g transform="translate(%.1f %.1f) rotate(-90)">`, x, y)
	s.text(0, 0, "middle", text)
	s.line(`</g>`)
}

// curve joins places; one that is no number breaks it.
func (s *sheet) curve(places []place, x, y func(float64) float64, dash string) {
	var d strings.Builder
	pen := byte('M')
	for _, p := range places {
		if math.IsNaN(p.y) {
			pen = 'M'
			continue
		}
		fmt.Fprintf(&d, "%c%.1f %.1f", pen, x(p.x), y(p.y))
		pen = 'L'
	}
	if d.Len() > 0 {
		s.line(`<path d="%s" stroke-width="1.3"%s/>`, d.String(), dash)
	}
}

// bounds leave a margin about everything.
func (p picture) bounds() (lowX, highX, lowY, highY float64) {
	lowX, highX, lowY, highY = math.Inf(1), math.Inf(-1), math.Inf(1), math.Inf(-1)
	take := func(x, y float64) {
		if !math.IsNaN(y) {
			lowX, highX, lowY, highY = math.Min(lowX, x), math.Max(highX, x), math.Min(lowY, y), math.Max(highY, y)
		}
	}
	for _, m := range p.points {
		take(m.x, m.y-m.u)
		take(m.x, m.y+m.u)
	}
	for _, line := range [][]place{p.fitted, p.predicted} {
		for _, f := range line {
			take(f.x, f.y)
		}
	}
	if p.fromZero {
		lowY = math.Min(lowY, 0)
	}
	margin := func(low, high *float64, share float64) {
		room := (*high - *low) * share
		if room == 0 {
			room = math.Max(math.Abs(*high)*0.1, 1e-3)
		}
		*low, *high = *low-room, *high+room
	}
	margin(&lowX, &highX, 0.03)
	if p.fromZero {
		highY += (highY - lowY) * 0.05
	} else {
		margin(&lowY, &highY, 0.06)
	}
	if highY <= lowY {
		highY = lowY + 1
	}
	return lowX, highX, lowY, highY
}

// spaced are round numbers between two whose names fit side by side on so many units of the picture.
func spaced(low, high, room float64) (list []float64) {
	for least := 5; least > 0; least-- {
		list = ticks(low, high, least)
		wide := 0
		for _, v := range list {
			wide = max(wide, len(plain(v)))
		}
		if float64(len(list))*(float64(wide)+1.5)*letterWide <= room {
			break
		}
	}
	return list
}

// ticks are round numbers between two, at least so many.
func ticks(low, high float64, least int) (list []float64) {
	step := math.Pow(10, math.Floor(math.Log10((high-low)/float64(least))))
	for _, k := range []float64{5, 2} {
		if (high-low)/(k*step) >= float64(least) {
			step *= k
			break
		}
	}
	for i := math.Ceil(low / step); i*step <= high; i++ {
		list = append(list, i*step)
	}
	return list
}

func plain(v float64) string {
	return strconv.FormatFloat(math.Round(v*1e9)/1e9+0, 'g', 8, 64)
}

func fixed(v float64, places int) string {
	p := math.Pow(10, float64(places))
	return strconv.FormatFloat(math.Round(v*p)/p+0, 'f', places, 64) // + 0: nothing is not less than nothing
}
