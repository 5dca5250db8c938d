package unit

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// Span prints a time for a person: "16 min 40 s", "2 h 5 min", "1.5 s", "250 ms". From a minute on it
// is rounded to whole seconds, a shorter one to three decimals of its unit. Whoever knows
// a time less well rounds it first. It is no quantity that Parse reads: that is Written.
func Span(d time.Duration) string {
	if d < 0 {
		return "-" + Span(-d)
	}
	for _, u := range spans[2:] {
		if d >= u.per && d.Round(time.Millisecond) < time.Minute {
			return strconv.FormatFloat(math.Round(float64(d)/float64(u.per)*1000)/1000, 'f', -1, 64) + " " + u.name
		}
	}
	if d == 0 {
		return "0 s"
	}
	d = d.Round(time.Second)
	var parts []string
	for _, u := range spans[:3] {
		if k := d / u.per; k > 0 {
			parts, d = append(parts, fmt.Sprintf("%d %s", k, u.name)), d%u.per
		}
	}
	return strings.Join(parts, " ")
}

// Written prints a time as a file has it, one number and one unit, exact: "1000 s", "250 ms", "2 h".
func Written(d time.Duration) string {
	for _, u := range spans {
		if d != 0 && d%u.per == 0 {
			return fmt.Sprintf("%d %s", d/u.per, u.name)
		}
	}
	return "0 s"
}

var spans = [...]struct {
	per  time.Duration
	name string
}{{time.Hour, "h"}, {time.Minute, "min"}, {time.Second, "s"}, {time.Millisecond, "ms"}, {time.Microsecond, "us"}, {time.Nanosecond, "ns"}}
