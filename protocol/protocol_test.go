package protocol_test

import (
	"encoding/json"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"gemel/protocol"
)

func TestTimesAreWrittenWithNineDigitsAndSortAsText(t *testing.T) {
	for in, want := range map[string]string{
		"2031-02-03T04:05:06Z":                `"2031-02-03T04:05:06.000000000Z"`,
		"2031-02-03T04:05:06.1Z":              `"2031-02-03T04:05:06.100000000Z"`,
		"2031-02-03T06:05:06.123456789+02:00": `"2031-02-03T04:05:06.123456789Z"`,
	} {
		body, err := json.Marshal(at(in))
		if err != nil || string(body) != want {
			t.Errorf("%s is written %s, %v; want %s", in, body, err, want)
		}
	}
	rapid.Check(t, func(t *rapid.T) {
		instant := rapid.Custom(func(t *rapid.T) protocol.Time {
			return protocol.Time{Time: time.Unix(rapid.Int64Range(0, 1<<34).Draw(t, "seconds"), rapid.Int64Range(0, 999_999_999).Draw(t, "nanoseconds"))}
		})
		a, b := instant.Draw(t, "a"), instant.Draw(t, "b")
		body, err := json.Marshal(a)
		if err != nil {
			t.Fatal(err)
		}
		var back protocol.Time
		if err := json.Unmarshal(body, &back); err != nil || !back.Equal(a.Time) {
			t.Fatalf("%s comes back as %v, %v", body, back, err)
		}
		if (a.String() < b.String()) != a.Before(b.Time) {
			t.Fatalf("%s and %s do not sort as their times", a, b)
		}
	})
}

func TestNoTimeIsNull(t *testing.T) {
	body, err := json.Marshal(protocol.Time{})
	if err != nil || string(body) != "null" {
		t.Errorf("no time is written %s, %v; want null", body, err)
	}
	back := at("2031-02-03T04:05:06Z")
	if err := json.Unmarshal(body, &back); err != nil || !back.IsZero() {
		t.Errorf("null comes back as %v, %v; want no time", back, err)
	}
}

func TestTimesThatAreNoneAreRefused(t *testing.T) {
	for _, body := range []string{`"2031-02-03"`, `"2031-02-03 04:05:06Z"`, `"2031-02-03T04:05:06"`, `"2031-02-30T04:05:06Z"`, `""`, `17`, `{}`,
		`"0001-01-01T00:00:00Z"`, `"0001-01-01T01:00:00+01:00"`, `"0000-12-31T23:59:59Z"`, `"0001-01-01T00:00:00+00:01"`, `"9999-12-31T23:59:59-00:01"`} {
		var back protocol.Time
		if err := json.Unmarshal([]byte(body), &back); err == nil {
			t.Errorf("%s is read as %v; want it refused", body, back)
		}
	}
}

func TestSecondsAreExact(t *testing.T) {
	for d, want := range map[time.Duration]string{
		0: "0", time.Nanosecond: "0.000000001", 1500 * time.Millisecond: "1.5", -time.Second: "-1", 100 * time.Second: "100",
		math.MaxInt64: "9223372036.854775807", math.MinInt64: "-9223372036.854775808",
	} {
		body, err := json.Marshal(protocol.Seconds(d))
		if err != nil || string(body) != want {
			t.Errorf("%v is written %s, %v; want %s", d, body, err, want)
		}
	}
	rapid.Check(t, func(t *rapid.T) {
		s := protocol.Seconds(rapid.Int64().Draw(t, "nanoseconds"))
		body, err := json.Marshal(s)
		if err != nil {
			t.Fatal(err)
		}
		var back protocol.Seconds
		if err := json.Unmarshal(body, &back); err != nil || back != s {
			t.Fatalf("%s comes back as %v, %v", body, back.Duration(), err)
		}
	})
}

func TestSecondsThatAreNoneAreRefused(t *testing.T) {
	for _, body := range []string{`"1"`, `1e-10`, `1e30`, `true`, `{}`, `[1]`} {
		var back protocol.Seconds
		if err := json.Unmarshal([]byte(body), &back); err == nil {
			t.Errorf("%s is read as %v; want it refused", body, back.Duration())
		}
	}
}

func TestSubjects(t *testing.T) {
	e := protocol.Entry{Run: "r1", Sequence: 12, Kind: protocol.ReadingEntry}
	for got, want := range map[string]string{
		protocol.Subject("skerry", e.Kind, e.Run): "gemel.skerry.reading.r1",
		protocol.BeatSubject("skerry"):            "gemel.skerry.beat",
		protocol.DoSubject("skerry", "start"):     "gemel.skerry.do.start",
		protocol.Stream("skerry"):                 "GEMEL_skerry",
		e.ID():                                    "r1.12",
	} {
		if got != want {
			t.Errorf("got %s; want %s", got, want)
		}
	}
	want := []string{"gemel.skerry.reading.*", "gemel.skerry.point.*", "gemel.skerry.event.*", "gemel.skerry.result.*"}
	if got := protocol.StreamSubjects("skerry"); !slices.Equal(got, want) {
		t.Errorf("the stream takes %v; want %v", got, want)
	}
}

func TestTokens(t *testing.T) {
	for name, want := range map[string]bool{
		"skerry": true, "-": true, "A_b-9": true, strings.Repeat("x", 64): true,
		"": false, "a.b": false, "a b": false, "*": false, ">": false, "$x": false, "é": false, "a\n": false, strings.Repeat("x", 65): false,
	} {
		if protocol.IsToken(name) != want {
			t.Errorf("%q is a token: %v; want %v", name, !want, want)
		}
	}
}

func TestFindingsReadAsPlaces(t *testing.T) {
	for _, c := range []struct {
		finding protocol.Finding
		want    string
	}{
		{protocol.Finding{File: "a.yaml", Line: 14, Col: 11, Key: "sweep[1].step", Found: "0.05 has no unit", Want: `an angle`}, `a.yaml:14:11: sweep[1].step: 0.05 has no unit; want an angle`},
		{protocol.Finding{File: "a.yaml", Found: "empty"}, "a.yaml: empty"},
		{protocol.Finding{Key: "key", Found: "none"}, "key: none"},
	} {
		if got := c.finding.String(); got != c.want {
			t.Errorf("got %q; want %q", got, c.want)
		}
	}
}

func TestFinalStates(t *testing.T) {
	for s, want := range map[protocol.State]bool{protocol.Queued: false, protocol.Running: false, protocol.Holding: false,
		protocol.Finished: true, protocol.Stopped: true, protocol.Failed: true} {
		if s.Final() != want {
			t.Errorf("%s is final: %v; want %v", s, !want, want)
		}
	}
}
