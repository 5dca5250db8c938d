package instruments_test

import (
	"testing"
	"time"

	"gemel/sim/instruments"
)

// SCPI-1999 spells READ? out as INITiate and FETCh? (recalled from memory).
func TestMonitorHoldsWhatItMeasuredUntilItMeasuresAgain(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "restart(meter, at 10s)")
		m, err := instruments.NewMonitor(w, instruments.MonitorConfig{Name: "meter", Power: true, Temperature: true, PowerNoise: 0.01, CelNoise: 0.1})
		if err != nil {
			t.Fatal(err)
		}
		l := plug(t, t.Context(), m)
		l.expect("*CLS;:FETC?;:SYST:ERR?", `-230,"Data corrupt or stale"`)
		l.send(":INIT\n")
		power, cel := l.ask(":FETC:POW?"), l.ask(":FETC:TEMP?")
		time.Sleep(time.Second)
		l.expect(":FETCh:SCALar:POWer:DC?;:FETC:TEMP?;:FETC?", power+";"+cel+";"+power+","+cel)
		for _, again := range []string{":INIT;:FETC:POW?", ":READ:POW?", ":MEAS:POW?", ":READ:SCAL:TEMP?;:FETC:POW?"} {
			before := l.ask(":FETC:POW?;TEMP?")
			l.ask(again)
			if after := l.ask(":FETC:POW?;TEMP?"); after == before {
				t.Errorf("after %s it still holds %s; want a new measurement", again, after)
			}
		}
		last := l.ask(":FETC?")
		if got := l.ask(":READ?"); got == last {
			t.Errorf("read %s; want a new measurement", got)
		}
		for wrong, why := range map[string]string{":INIT 1": `-108,"Parameter not allowed"`, ":MEAS?": `-113,"Undefined header;MEAS"`} {
			l.send(wrong + "\n")
			l.expect(":SYST:ERR?", why)
		}
		l.expect("*RST;:FETC:TEMP?;:SYST:ERR?", `-230,"Data corrupt or stale"`)
		l.send(":INIT\n")
		time.Sleep(15 * time.Second)
		l.expect("*ESR?;:FETC?;:SYST:ERR?", `128;-230,"Data corrupt or stale"`)
		w.Settle()
		var watt, celsius int
		for _, r := range w.Ledger().Records() {
			switch {
			case r.Kind != instruments.SensorRead:
			case r.Text == "W":
				watt++
			case r.Text == "Cel":
				celsius++
			}
		}
		if watt != 7 || celsius != 7 {
			t.Errorf("%d powers and %d temperatures in the ledger; want both of 7 measurements", watt, celsius)
		}
		l.hangUp()
	})
}
