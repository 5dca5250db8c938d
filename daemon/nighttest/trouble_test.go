package nighttest

import (
	"bytes"
	"strings"
	"testing"

	"gemel/protocol"
)

// A process that begins meets a device that hangs in its rest state, and says so by name; a controller that
// falls silent while an unplugged shutter is waited for is written beside it.
func TestWhatATroubleMetOnTheWayBackIsWritten(t *testing.T) {
	const recipe = `{title: Ring, sweep: [{axis: signal_arm, at: 2.864 deg}, {axis: idler_arm, around: 2.864 deg, span: 0.8 deg, step: 0.2 deg}], dwell: 2 s, repeat: {times: 6, as: passes}, trouble: {retries: 3, then: skip, give_up_after: 1 h}}`
	for _, test := range []struct {
		name, line string
		silenced   map[string]string // in the journal: what the judge must then miss
		want       string
	}{
		{"in the rest state of a start", "plain :: " + recipe + " :: kill 40s | hung(plate, at 45s, for 20s)",
			map[string]string{"REACHED: stop plate: plate: ": "REACHED: ", "reached: stop plate: plate: ": "reached: ", `"kind":"trouble"`: `"kind":"operator"`}, "hung(plate, at 45s, for 20s) took effect, and none of"},
		{"while another device is waited for", "plain :: " + recipe + " :: | unplug(shutter, at 35s, for 12s); silent(rotary, at 46.5s, for 28s)",
			map[string]string{`"device":"rotary"`: `"device":""`, `"kind":"trouble","text":"rotary`: `"kind":"operator","text":"rotary`}, "silent(rotary, at 46.5s, for 28s) took effect, and none of"},
	} {
		t.Run(test.name, func(t *testing.T) {
			t.Parallel()
			d, err := ParseNight(family(t), test.line)
			if err != nil {
				t.Fatal(err)
			}
			r := play(t, d.Night)
			demand(t, d.Night, r, test.line)
			for i, m := range r.Line {
				for _, entry := range []*protocol.Entry{m.Journal, m.Stream} {
					if entry == nil {
						continue
					}
					changed := *entry
					for old, silent := range test.silenced {
						changed.Body = bytes.ReplaceAll(changed.Body, []byte(old), []byte(silent))
					}
					if entry == m.Journal {
						r.Line[i].Journal = &changed
					} else {
						r.Line[i].Stream = &changed
					}
				}
			}
			if raced {
				return // another order of goroutines is another night, in which the plate may be met elsewhere
			}
			if wrong := strings.Join(r.Judge(), "\n"); !strings.Contains(wrong, test.want) {
				t.Errorf("with its words taken out of the journal the judge says %q; want %q", wrong, test.want)
			}
		})
	}
}
