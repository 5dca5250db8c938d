//go:build unix

package main

import (
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/protocol/client"
	"gemel/protocol/unit"
	"gemel/sim/instruments"
)

// handPhase is a place in a person's work at which it is to stop: acts one after another, the last
// of which goes on.
type handPhase struct {
	name  string
	typed []string
	acts  []protocol.HandRequest // the same, as requests
	begun func(instruments.Record) bool
	rare  bool
}

func handPhases() []handPhase {
	open, far := true, unit.Degrees(9)
	lit := []protocol.HandRequest{{Act: protocol.HandShutter, Shutter: "detectors", Open: &open}, {Act: protocol.HandShutter, Shutter: "pump", Open: &open}}
	arm := func(kind instruments.Kind) func(instruments.Record) bool {
		return func(r instruments.Record) bool {
			s, is := r.Axes["signal_arm"]
			return r.Kind == kind && is && (kind == instruments.HomeStarted || s.ToDeg-s.FromDeg > 0.5)
		}
	}
	return []handPhase{{
		name: "an arm's move", typed: []string{"signal_arm 9 deg"},
		acts:  []protocol.HandRequest{{Act: protocol.HandMove, Axis: "signal_arm", To: &far}},
		begun: arm(instruments.MoveStarted),
	}, {
		name: "a look at the light", typed: []string{"detectors open", "pump open", "look 40 s"},
		acts:  append(lit[:2:2], protocol.HandRequest{Act: protocol.HandLook, Gate: protocol.Seconds(40 * time.Second)}),
		begun: gateIsLong,
	}, {
		name: "the light, which is on while nothing is asked for", acts: lit,
		begun: func(r instruments.Record) bool {
			return r.Device == "shutter" && r.Kind == instruments.BladeOpened
		},
	}, {
		name: "a search for a zero", typed: []string{"home signal_arm"}, rare: true,
		acts:  []protocol.HandRequest{{Act: protocol.HandHome, Axis: "signal_arm"}},
		begun: arm(instruments.HomeStarted),
	}}
}

// handStopping is a session of hand work, and who works.
type handStopping struct {
	*stopping
	client  *client.Client
	session string
	typing  *program // nil: requests
	told    string   // what the journal must say of the end
}

var handWays = []struct {
	name  string
	typed bool
	ask   func(t *testing.T, s *handStopping)
}{{
	name: "by a stop of somebody else", ask: func(t *testing.T, s *handStopping) {
		r, err := s.client.Stop(within(t), protocol.RunRequest{Run: protocol.BenchRun, Who: "somebody else"})
		if err != nil || r.State != protocol.Stopped || !r.Recorded {
			t.Errorf("the stop was answered %+v, %v; want stopped and recorded", r, err)
		}
		s.acked, s.told = time.Now(), "somebody else ended the hand work of the test, with the bench at rest"
	},
}, {
	name: "by an act of rest", ask: func(t *testing.T, s *handStopping) {
		r, err := s.client.Hand(within(t), protocol.HandRequest{Act: protocol.HandRest, Session: s.session, Who: "the test"})
		if err != nil || !r.Recorded {
			t.Errorf("the rest was answered %+v, %v; want it done and recorded", r, err)
		}
		s.acked, s.told = time.Now(), "brought the bench to rest"
	},
}, {
	name: "by SIGTERM to serve", ask: func(t *testing.T, s *handStopping) {
		s.p.signal(syscall.SIGTERM)
		s.p.wait()
		s.acked, s.told = s.p.endedAt, "the program was told to end, and the hand work of the test with it, with the bench at rest"
	},
}, {
	name: "by Ctrl-C to hand", typed: true, ask: func(t *testing.T, s *handStopping) {
		s.typing.signal(syscall.SIGINT)
		s.typing.wait()
		s.acked, s.told = s.typing.endedAt, "took the hand off the bench, with the bench at rest"
	},
}}

// Each phase is stopped in one way by default, in turn; with -stop.all in all of them.
func TestAStopEndsHandWorkWithinASecond(t *testing.T) {
	for i, ph := range handPhases() {
		for j, w := range handWays {
			if w.typed && ph.typed == nil || !*stopAll && (ph.rare || i != j && !(w.typed && i == 0) || testing.Short() && i > 0) {
				continue
			}
			t.Run(ph.name+" "+w.name, func(t *testing.T) {
				dir := t.TempDir()
				s := &handStopping{stopping: &stopping{bench: quick(t, dir, change{`speed: 2000 deg/s$`, "speed: 1 deg/s"}), data: filepath.Join(dir, "data"), lines: filepath.Join(dir, "lines")}}
				sim, ledger := simulate(t, s.bench, s.lines, "")
				var ok bool
				if s.p, ok = serve(t, nil, "--bench", s.bench, "--data", s.data, "--lines", s.lines); !ok {
					t.Fatalf("serve: %s", s.p.err)
				}
				s.work(t, ph, w.typed)
				ledger.await(t, 0, ph.name, ph.begun)
				before := len(ledger.all(t))
				asked := time.Now()
				w.ask(t, s)
				s.client.Close()
				select {
				case <-s.p.ended:
				default:
					s.p.signal(syscall.SIGTERM)
				}
				if code := s.p.wait(); code != exitDone {
					t.Errorf("serve: exit code %d\n%s", code, s.p.err)
				}
				quit(t, sim)
				<-ledger.done
				wantStopped(t, ledger.all(t), before, asked, []string{"rotary", "plate", "gate", "pump"})
				wantRest(t, ledger.all(t), asked, s.acked, restWithin)
				var texts []string
				for _, e := range entriesOf(t, s.data) {
					texts = append(texts, string(e.Body))
				}
				if all := strings.Join(texts, "\n"); !strings.Contains(all, s.told) {
					t.Errorf("the journal does not say %q:\n%s", s.told, all)
				}
			})
		}
	}
}

// work begins a session and leaves its last act going on.
func (s *handStopping) work(t *testing.T, ph handPhase, typed bool) {
	t.Helper()
	var err error
	if s.client, err = client.ConnectFolder(s.data, protocol.ControlRole); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(s.client.Close)
	if typed {
		args := []string{"hand", "--data", s.data}
		for _, act := range ph.typed {
			args = append(args, "--do", act)
		}
		s.typing = launch(t, nil, args...)
		return
	}
	ask := func(q protocol.HandRequest) (protocol.HandReply, error) {
		q.Session, q.Who = s.session, "the test"
		return s.client.Hand(within(t), q)
	}
	r, err := ask(protocol.HandRequest{Act: protocol.HandWhere})
	s.session = r.Session
	for _, act := range ph.acts[:len(ph.acts)-1] {
		if err == nil {
			_, err = ask(act)
		}
	}
	if err != nil {
		t.Fatal(err)
	}
	last := ph.acts[len(ph.acts)-1]
	ended := make(chan struct{})
	t.Cleanup(func() { <-ended })
	go func() {
		defer close(ended)
		_, _ = ask(last) // interrupted, or the daemon is gone
	}()
}
