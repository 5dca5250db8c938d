package instruments_test

import (
	"testing"
	"time"

	"gemel/sim/instruments"
)

func TestANightsFirstReading(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		s := plug(t, t.Context(), arms(t, w, nil))
		c := plug(t, t.Context(), counter(t, w, nil))
		s.expect("WHO", "WHO Skerry,R3,17,1.2")
		s.expect("G90 G0 A2.864 B2.864", "TAKEN")
		s.expect("REST", "TURNING")
		time.Sleep(2 * time.Second)
		s.expect("REST", "STILL")
		s.expect("WHERE", "AT A+002.8640 B+002.8640 C+000.0000")
		c.expect("*IDN?", "Skerry,C4,3,2.0")
		c.send(":INIT\n")
		time.Sleep(1100 * time.Millisecond)
		t.Log(c.ask(":FETC?"))
		s.hangUp()
		c.hangUp()
		w.Settle()
		for _, r := range w.Ledger().Records() {
			t.Logf("%+v %+v", r, r.Gate)
		}
		_ = instruments.GateRead
	})
}
