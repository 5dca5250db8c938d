package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"
)

// armFile tells in the data folder until when remote requests may move a real bench. Only somebody
// who can write there, at the machine, can arm.
const armFile = "armed.json"

type arming struct {
	At    time.Time `json:"at"`
	Until time.Time `json:"until"`
	Who   string    `json:"who"`
}

// backwards is how far a clock may be set back, as it is now and then by a time service, and the bench
// still be armed. Beyond it nobody knows how long ago the word was given.
const backwards = time.Minute

// covers says whether the bench is armed at a moment of the wall's clock. No more than a day is
// believed, whatever the clock did meanwhile.
func (a arming) covers(now time.Time) bool {
	return !now.Before(a.At.Add(-backwards)) && now.Before(a.Until) && now.Before(a.At.Add(25*time.Hour))
}

// armedIn says whether the bench of a data folder is armed. Simulated ones always are.
func armedIn(data string, simulated bool) func(time.Time) bool {
	return func(now time.Time) bool {
		if simulated {
			return true
		}
		text, err := os.ReadFile(filepath.Join(data, armFile))
		if err != nil {
			return false
		}
		var a arming
		return json.Unmarshal(text, &a) == nil && a.covers(now)
	}
}

type armCommand struct {
	Until string `required:"" placeholder:"HH:MM" help:"End, as a clock time within the next 24 hours; \"now\" disarms."`
	Data  string `default:"gemel-data" placeholder:"DIR" help:"Data folder."`
}

func (armCommand) Help() string {
	return "Example:\n  gemel arm --until 07:00\n\nClear the arms' ranges, announce it, close the enclosure. Until then remote requests are refused."
}

func (c *armCommand) Run(_ context.Context, con *console) error {
	now := time.Now()
	until, err := nextClock(c.Until, now)
	if err != nil {
		return errUse{err}
	}
	if _, err := os.Stat(c.Data); errors.Is(err, fs.ErrNotExist) {
		return errUse{fmt.Errorf("no data folder %s; name the one that the daemon serves with --data", c.Data)}
	}
	text, err := json.Marshal(arming{At: now, Until: until, Who: whoami()})
	if err != nil {
		return err
	}
	if err := os.WriteFile(filepath.Join(c.Data, armFile), append(text, '\n'), 0o600); err != nil {
		return err
	}
	if c.Until == "now" {
		fmt.Fprintln(con.out, "disarmed: remote requests can move nothing")
		return nil
	}
	fmt.Fprintf(con.out, "armed until %s: remote requests can move the arms and open the shutter until then\n", until.Local().Format("2006-01-02 15:04 MST"))
	return nil
}

// nextClock is the next instant at which a clock here shows text.
func nextClock(text string, now time.Time) (time.Time, error) {
	if text == "now" {
		return now, nil
	}
	t, err := time.ParseInLocation("15:04", text, now.Location())
	if err != nil {
		return time.Time{}, fmt.Errorf("until %q; want a clock time such as 07:00, or now", text)
	}
	until := time.Date(now.Year(), now.Month(), now.Day(), t.Hour(), t.Minute(), 0, 0, now.Location())
	if !until.After(now) {
		until = time.Date(now.Year(), now.Month(), now.Day()+1, t.Hour(), t.Minute(), 0, 0, now.Location())
	}
	return until, nil
}
