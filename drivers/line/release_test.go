package line_test

import (
	"errors"
	"testing"

	"gemel/drivers"
	"gemel/drivers/line"
)

func TestALineThatWasLetGoStaysClosedUntilItIsTaken(t *testing.T) {
	onLine(t, func(in *instrument, _ string) { in.say("yes\n") }, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		ask := line.Question{Op: "where", Send: []byte("WHERE"), Judge: anything}
		if _, err := s.Ask(t.Context(), ask); err != nil {
			t.Fatal(err)
		}
		for range 2 { // twice is no error
			if err := l.Release(t.Context()); err != nil {
				t.Fatal(err)
			}
		}
		if _, err := in.far.Write([]byte("x")); err == nil {
			t.Error("the far end can still write: the port is open")
		}
		if _, err := s.Ask(t.Context(), ask); !errors.Is(err, line.ErrLetGo) {
			t.Errorf("Ask() = %v; want that the line was let go", err)
		}
		if _, err := s.Connect(t.Context()); !errors.Is(err, line.ErrLetGo) || drivers.RemedyOf(err) != drivers.GiveUp {
			t.Errorf("Connect() = %v; want that the line was let go, and no waiting for it", err)
		}
		if _, err := s.Urgent(t.Context(), line.Question{Op: "stop", Send: []byte{3}, Bare: true}); !errors.Is(err, line.ErrLetGo) {
			t.Errorf("Urgent() = %v; want that the line was let go", err)
		}
		if in.opened != 1 {
			t.Errorf("opened %d times; want once", in.opened)
		}
		l.Take()
		if _, err := s.Ask(t.Context(), ask); drivers.RemedyOf(err) != drivers.Reconnect {
			t.Errorf("Ask() = %v; want reconnect before anything is asked", err)
		}
		if fresh, err := s.Connect(t.Context()); err != nil || !fresh {
			t.Errorf("Connect() = %v, %v; want a line opened anew", fresh, err)
		}
		if _, err := s.Ask(t.Context(), ask); err != nil {
			t.Errorf("Ask() = %v after it was taken again", err)
		}
	})
}
