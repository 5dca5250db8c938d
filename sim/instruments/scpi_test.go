package instruments_test

import (
	"fmt"
	"strings"
	"testing"
	"time"

	"gemel/sim/instruments"
)

// Numbers, texts, flags and syntax are those of IEEE 488.2 and SCPI-1999 as quoted in the
// reference notes, sections 1.1 to 1.4. After each exchange the error queue is read to its end.
func TestSCPIMessages(t *testing.T) {
	const none = `0,"No error"`
	long := strings.Repeat("9", 256)
	for _, c := range []struct{ name, send, want, errors string }{
		{"identity has four fields (488.2, 10.14)", "*IDN?", "Skerry,C4,3,2.0", none},
		{"small letters", "*idn?", "Skerry,C4,3,2.0", none},
		{"CR NL ends a message", "*IDN?\r", "Skerry,C4,3,2.0", none},
		{"the version, YYYY.V", ":SYSTem:VERSion?", "1999.0", none},
		{"short form", ":SYST:VERS?", "1999.0", none},
		{"nothing between short and long form", ":SYSTE:VERS?", "", `-113,"Undefined header;SYSTE:VERS"`},
		{"without the leading colon", "SYST:VERS?", "1999.0", none},
		{"an optional node", ":SYST:ERR:NEXT?", none, none},
		{"power-on sets bit 7 of the event register, once", "*ESR?;*ESR?", "128;0", none},
		{"all operations complete", "*OPC?", "1", none},
		{"*OPC sets bit 0", "*CLS;*OPC;*ESR?", "1", none},
		{"*OPC? sets no bit", "*CLS;*OPC?;*ESR?", "1;0", none},
		{"*TST? has passed", "*TST?", "0", none},
		{"*WAI with nothing pending", "*WAI;*STB?", "0", none},
		{"*ESE holds 8 bits", "*ESE 173;*ESE?", "173", none},
		{"*ESE takes no 256", "*ESE 256", "", `-222,"Data out of range"`},
		{"*ESE needs a number", "*ESE", "", `-109,"Missing parameter"`},
		{"*ESE takes one number", "*ESE 1,2", "", `-108,"Parameter not allowed"`},
		{"bit 6 of *SRE is not stored", "*SRE 255;*SRE?", "191", none},
		{"*RST leaves the enable registers", "*ESE 5;*SRE 4;*RST;*ESE?;*SRE?", "5;4", none},
		{"a parameter where none is allowed", "*IDN? 1", "", `-108,"Parameter not allowed"`},
		{"an unknown common command", "*XYZ", "", `-113,"Undefined header;*XYZ"`},

		{"the next unit goes on from the branch", "syst:version?;*idn?;err:next?", `1999.0;Skerry,C4,3,2.0;0,"No error"`, none},
		{"a colon goes back to the root", "SYST:VERS?;:SYST:ERR?", `1999.0;0,"No error"`, none},
		{"without it the branch is kept", "SYST:VERS?;SYST:ERR?", "1999.0", `-113,"Undefined header;SYST:SYST:ERR"`},
		{"a command error ends the message", "*ESE 1;:NO;*ESE 2", "", `-113,"Undefined header;NO"`},
		{"what came before it stands", "*ESE 1;*ESE?;:NO", "1", `-113,"Undefined header;NO"`},
		{"an execution error does not end it", ":FETC?;*ESE?", "0", `-230,"Data corrupt or stale"`},
		{"a query-only header as a command", ":SYST:ERR", "", `-113,"Undefined header;SYST:ERR"`},
		{"a command-only header as a query", ":INIT?", "", `-113,"Undefined header;INIT"`},
		{"a suffix of 1 is the same as none", ":SENS1:TOT1:APER?", "1.000000E+00", none},
		{"another suffix there is not", ":SENS2:TOT:APER?", "", `-114,"Header suffix out of range;SENS2"`},
		{"a mnemonic of 13 characters", ":ABCDEFGHIJKLM", "", `-112,"Program mnemonic too long;ABCDEFGHIJKLM"`},
		{"a wrong header separator", ":TRIG:SOUR,IMM", "", `-111,"Header separator error;:TRIG:SOUR,IMM"`},
		{"an invalid character", ":SENS\x01", "", `-101,"Invalid character"`},
		{"a header that ends in a colon", ":SENS:", "", `-102,"Syntax error;:SENS:"`},
		{"an empty unit", "*ESE 3;;*ESE?", "", `-102,"Syntax error;empty unit"`},
		{"an empty message", "", "", none},

		{"a gate in plain seconds", ":SENS:TOT:APER 2;:SENS:TOT:APER?", "2.000000E+00", none},
		{"fixed point and exponent", ":SENS:TOT:APER 0.25E1;APER?", "2.500000E+00", none},
		{"a unit behind the number", ":SENS:TOT:APER 250 MS;APER?", "2.500000E-01", none},
		{"minutes, small letters, no space", ":tot:aper 2min;aper?", "1.200000E+02", none},
		{"the gate's bounds can be asked", ":SENS:TOT:APER? MIN;APER? MAXIMUM", "1.000000E-03;1.000000E+03", none},
		{"and set by name", ":SENS:TOT:APER MAX;APER?", "1.000000E+03", none},
		{"*RST sets the gate to 1 s", ":SENS:TOT:APER 5;*RST;:SENS:TOT:APER?", "1.000000E+00", none},
		{"a gate out of range", ":SENS:TOT:APER 0", "", `-222,"Data out of range"`},
		{"a unit that is none", ":SENS:TOT:APER 1 FURLONG", "", `-131,"Invalid suffix;FURLONG"`},
		{"a unit where none may be", "*ESE 1 S", "", `-138,"Suffix not allowed;S"`},
		{"a number with a letter in it", ":SENS:TOT:APER 1.2.3", "", `-121,"Invalid character in number;1.2.3"`},
		{"a mantissa of 256 digits", ":SENS:TOT:APER " + long, "", `-124,"Too many digits"`},
		{"an exponent of 32001", ":SENS:TOT:APER 1E32001", "", `-123,"Exponent too large"`},
		{"an exponent that is legal and too much", ":SENS:TOT:APER 1E32000", "", `-222,"Data out of range"`},
		{"hexadecimal", "*ESE #HFF;*ESE?", "255", none},
		{"octal and binary", "*ESE #Q17;*SRE #B101;*ESE?;*SRE?", "15;5", none},
		{"a string where a number belongs", ":SENS:TOT:APER \"1\"", "", `-104,"Data type error"`},
		{"a string without end", `:SENS:FUNC:ON "TOT 1`, "", `-151,"Invalid string data"`},
		{"a semicolon inside a string", `:SENS:FUNC:ON "TOT; 1"`, "", `-224,"Illegal parameter value;TOT; 1"`},
		{"a word that is not offered", ":TRIG:SOUR EXT", "", `-224,"Illegal parameter value;EXT"`},
		{"a number where a word belongs", ":TRIG:SOUR 1", "", `-128,"Numeric data not allowed"`},

		{"format", ":FORM ASC;:FORM?", "ASC", none},
		{"format with a length", ":FORMat:DATA ASCii,8;:FORM:DATA?", "ASC", none},
		{"functions", `:SENS:FUNC:CONC ON;:SENS:FUNC:ON "TOT 1","TOTalize 2";:SENS:FUNC?`, `"TOT 1","TOT 2","TOT 3","TOT 4"`, none},
		{"switching a channel off", `:SENS:FUNC:OFF "TOT 2";:SENS:FUNC?`, `"TOT 1","TOT 3","TOT 4"`, none},
		{"a channel there is not", `:SENS:FUNC "TOT 9"`, "", `-224,"Illegal parameter value;TOT 9"`},
		{"channels always count together", ":SENS:FUNC:CONC OFF", "", `-221,"Settings conflict;channels always count together"`},
		{"trigger", ":TRIG:SOUR IMM;COUN 1;:TRIG:SOUR?;COUN?;COUN? MAX", "IMM;1;1", none},
		{"a trigger count that is not offered", ":TRIG:COUN 2", "", `-222,"Data out of range"`},
		{"counts before the first gate", ":FETC?", "", `-230,"Data corrupt or stale"`},
		{"a second gate while one is open", ":INIT;:INIT", "", `-213,"Init ignored"`},
		{"counts while the gate is open", ":INIT;:FETC?", "", `-230,"Data corrupt or stale"`},
		{"abort, then no counts", ":INIT;:ABOR;:FETC?", "", `-230,"Data corrupt or stale"`},
		{"abort with no gate is no error", ":ABOR;:SYST:ERR?", none, none},
		{"a gate is measuring", ":INIT;:STAT:OPER:COND?", "16", none},
		{"no gate is not", ":STAT:OPER:COND?;:STAT:QUES:EVEN?", "0;0", none},
		{"enable masks have no bit 15", ":STAT:OPER:ENAB 65535;ENAB?", "32767", none},
		{"after power-on only rising bits count", ":STAT:QUES:PTR?;NTR?", "32767;0", none},
		{"preset disables", ":STAT:OPER:ENAB 16;:STAT:PRES;:STAT:OPER:ENAB?", "0", none},
	} {
		t.Run(c.name, func(t *testing.T) {
			bubble(t, func(t *testing.T) {
				l := plug(t, t.Context(), counter(t, world(t, 1, ""), nil))
				l.expect(c.send, c.want)
				l.expect(":SYST:ERR?", c.errors)
				if c.errors != none {
					l.expect(":SYST:ERR?", none)
				}
				l.hangUp()
			})
		})
	}
}

func TestSCPIErrorQueue(t *testing.T) {
	bubble(t, func(t *testing.T) {
		l := plug(t, t.Context(), counter(t, world(t, 1, ""), nil))
		for range 20 {
			l.send(":NO\n")
		}
		l.expect(":SYST:ERR:COUN?", "16")
		for range 15 {
			l.expect(":SYST:ERR?", `-113,"Undefined header;NO"`)
		}
		l.expect(":SYST:ERR?", `-350,"Queue overflow"`) // the newest are the lost ones
		l.expect(":SYST:ERR?", `0,"No error"`)
		l.send(":NO;*RST\n")
		l.send("*RST\n") // does not clear it
		l.expect(":SYST:ERR:COUN?", "1")
		l.send(":TRIG:SOUR 1\n")
		l.expect(":SYST:ERR:ALL?", `-113,"Undefined header;NO",-128,"Numeric data not allowed"`)
		l.send(":NO\n*CLS\n")
		l.expect(":SYST:ERR?", `0,"No error"`)
		l.hangUp()
	})
}

func TestSCPIStatusByte(t *testing.T) {
	bubble(t, func(t *testing.T) {
		l := plug(t, t.Context(), counter(t, world(t, 1, ""), nil))
		l.expect("*CLS;*STB?", "0")
		l.send("*ESE 32;*SRE 32\n:NO\n")
		l.expect("*STB?", fmt.Sprint(4+32+64)) // errors waiting, event summary, master
		l.expect("*ESR?", "32")                // a command error, cleared by reading
		l.expect("*STB?", "4")
		l.expect(":SYST:ERR?", `-113,"Undefined header;NO"`)
		l.expect("*STB?", "0")
		l.expect("*CLS;:FETC?;*ESR?", "16") // an execution error
		l.expect("*IDN?;*STB?", "Skerry,C4,3,2.0;20")
		l.hangUp()
	})
}

func TestSCPIOperationCompleteWaitsForTheGate(t *testing.T) {
	bubble(t, func(t *testing.T) {
		l := plug(t, t.Context(), counter(t, world(t, 1, ""), nil))
		begin := time.Now()
		l.send("*CLS;:INIT;*OPC;*OPC?;*ESR?\n:ABOR\n") // the abort waits behind *OPC?
		if s := l.hear(time.Minute); s != "1;1" {
			t.Errorf("answer %q; want 1, and bit 0 set by *OPC", s)
		}
		if d := time.Since(begin); d < time.Second || d > 1010*time.Millisecond {
			t.Errorf("it came after %v; want the gate of 1 s", d)
		}
		if s := l.ask(":FETC?"); !strings.HasPrefix(s, "+") {
			t.Errorf("counts %q; want the gate's, which the late abort no longer met", s)
		}
		l.send(":INIT;*OPC;:SYST:VERS?\n")
		if s := l.hear(time.Second); s != "1999.0" {
			t.Errorf("answer %q; want it at once, *OPC does not wait", s)
		}
		l.expect("*ESR?", "0")
		time.Sleep(2 * time.Second)
		l.expect("*ESR?", "1")
		l.hangUp()
	})
}

func TestSCPIInputIsBounded(t *testing.T) {
	bubble(t, func(t *testing.T) {
		l := plug(t, t.Context(), counter(t, world(t, 1, ""), nil))
		for range 3 {
			l.send(strings.Repeat("A", 2000))
			time.Sleep(time.Millisecond)
		}
		l.send("\n")
		l.expect(":SYST:ERR?", `-363,"Input buffer overrun"`)
		l.expect("*IDN?", "Skerry,C4,3,2.0")
		l.hangUp()
	})
}

func TestCounterNumberForms(t *testing.T) {
	for _, c := range []struct{ form, want string }{
		{instruments.NR1Signed, "+3"}, {instruments.NR1Plain, "3"}, {instruments.NR3Form, "+3.00000000E+00"},
	} {
		bubble(t, func(t *testing.T) {
			l := plug(t, t.Context(), counter(t, world(t, 1, ""), func(k *instruments.CounterConfig) {
				k.Numbers = c.form
				k.Channels = []string{instruments.CountsGates}
			}))
			for range 3 {
				l.expect(":INIT;*OPC?", "")
				l.hear(time.Second)
			}
			l.expect(":FETC?", c.want)
			l.hangUp()
		})
	}
}
