package nighttest

import (
	"context"
	"encoding/json"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/broker"
	"gemel/daemon/courier"
	"gemel/daemon/crew"
	"gemel/daemon/keeper"
	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/scan/engine"
	"gemel/sim/instruments"
)

var readingsFlag = flag.Int("readings", 0, "how many readings the long run takes; 0: 4,800, fewer with -short or -race")

// leanBench is the least that takes readings.
const leanBench = `
bench: {name: lean}
simulation:
  clock: 1
  seed: 1
  truth:
    signal: {efficiency: 60 %}
    idler: {efficiency: 60 %}
lines:
  arms: {device: simulated}
  counter: {device: simulated}
  pump_shutter: {device: simulated}
controllers:
  arms:
    line: arms
    dialect: custom
    motion: each
    refused: {match: "E(?P<reason>[0-9]+)"}
    asks:
      where: {send: "P{address}", match: "P(?P<angle>-?[0-9]+)", angle_is: 0.0001 deg}
      move: {send: "M{address} {angle}", match: OK, proves: accepted, angle_is: 0.0001 deg}
      at_rest: {send: "S{address}", match: IDLE, otherwise: BUSY|RAMP}
      stop: {bytes: '\x18'}
      homed: {send: "Z{address}", match: "1", otherwise: "0"}
axes:
  signal_arm: {role: signal_arm, controller: arms, address: "1", limits: [0 deg, 10 deg], speed: 100 deg/s, acceleration: 10000 deg/s2, tolerance: 0.002 deg, position_from: encoder, park: 2.8 deg}
counters:
  counter:
    line: counter
    dialect: scpi
    channels: [signal, idler, pairs, gates]
    coincidences: {pairs: [signal, idler]}
    logic: every_pair
    latched: true
    window: {full: 4 ns}
    gate: [1 ms, 1000 s]
    gate_tag: gates
detectors:
  signal: {channel: signal}
  idler: {channel: idler}
shutter: {line: pump_shutter, dialect: scpi, settle_open: 10 ms, settle_closed: 10 ms}
optics:
  crystal: bbo-kato-1986
  process: e-oo
  cut: 29.2 deg
  thickness: 2 mm
  temperature: 20 Cel
  azimuth: 90 deg
  pump: {wavelength: 405 nm, waist: 130 um, power: 45 mW}
  pairs_per_mw: 420 Hz
arms:
  signal: {detector: signal, aperture: {kind: iris, radius: 3 mm}, distance: 500 mm, filter: {centre: 810 nm, width: 10 nm, shape: gaussian}, face: fibre_input}
  idler: {detector: idler, aperture: {kind: iris, radius: 3 mm}, distance: 500 mm, filter: {centre: 810 nm, width: 10 nm, shape: gaussian}, face: fibre_input}
`

// longRuns and perRun cut the readings into runs, and each run into equal parts with a sample after each.
// The runs are a multiple of three: thirds of the whole are compared, and each then holds samples from
// the same places of a run.
const (
	longRuns = 12
	perRun   = 5
)

// What may grow. The heap of the whole process, server included, is compared with the same places
// of earlier runs, so nothing of a run may outlive it: heapNoise is what the server's block caches and
// the allocator differ by, and perReading a rounding error over many readings. Within a run its own
// plan may grow with it: a visit and the note that it is done (perVisit).
const (
	heapNoise  = 4 << 20
	slopeNoise = 64 << 10
	perReading = 4   // bytes
	perVisit   = 160 // bytes
	// lateReaders are the descriptors of the logbook's second and third reader, a file and its log each:
	// they are opened when a question first comes while another is answered, and stay.
	lateReaders = 4
	// mostWAL is what the logbook promises: 16 MiB, and what 64 appends may add before it looks again.
	mostWAL = 16<<20 + 64*16<<10
)

// sample is what the process holds at one moment.
type sample struct {
	readings   int
	heap       uint64 // after two collections: nothing in it is garbage, nor in a pool
	goroutines int
	files      int // open descriptors; 0 where nobody can tell
	wal        int64
	book       int64
	took       time.Duration // in truth
}

func (s sample) String() string {
	return fmt.Sprintf("%8d readings after %8s: heap %6.2f MiB, %d goroutines, %d descriptors, write-ahead log %.2f MiB, logbook %.1f MiB",
		s.readings, s.took.Round(time.Second), float64(s.heap)/(1<<20), s.goroutines, s.files, float64(s.wal)/(1<<20), float64(s.book)/(1<<20))
}

// outside carries questions of a bubble to a goroutine outside of it. Time in the bubble stands still
// while an answer is waited for, for the channels are not the bubble's.
type outside struct {
	ask      chan func()
	answered chan struct{}
}

func newOutside() *outside { return &outside{make(chan func()), make(chan struct{})} }

func (o *outside) serve() {
	for f := range o.ask {
		f()
		o.answered <- struct{}{}
	}
}

func (o *outside) do(f func()) {
	o.ask <- f
	<-o.answered
}

// distant is a stream on a server outside the bubble, for the courier inside.
type distant struct {
	*outside
	stream *courier.Stream
}

func (d distant) Last(context.Context) (last courier.Last, err error) {
	d.do(func() { last, err = d.stream.Last(context.Background()) })
	return last, err
}

func (d distant) Publish(_ context.Context, m courier.Message, after courier.Last) (last courier.Last, err error) {
	d.do(func() { last, err = d.stream.Publish(context.Background(), m, after) })
	return last, err
}

// longRun is the program without a witness: keeper, engine, drivers, logbook and courier in a bubble,
// the broker beside it, and virtual instruments whose ledger forgets.
type longRun struct {
	t       *testing.T
	data    string
	each    int // readings a run
	began   time.Time
	written int
	samples []sample
	sink    distant
	told    []string
}

func (l *longRun) sample() {
	if len(l.samples) == cap(l.samples) {
		return
	}
	runtime.GC()
	runtime.GC()
	var m runtime.MemStats
	runtime.ReadMemStats(&m)
	s := sample{readings: l.written, heap: m.HeapAlloc, goroutines: runtime.NumGoroutine(), took: l.sinceBegan()}
	if open, err := os.ReadDir("/proc/self/fd"); err == nil {
		s.files = len(open)
	}
	for file, size := range map[string]*int64{"logbook.db-wal": &s.wal, "logbook.db": &s.book} {
		info, err := os.Stat(filepath.Join(l.data, file))
		if err != nil {
			l.t.Error(err)
			return
		}
		*size = info.Size()
	}
	l.samples = append(l.samples, s)
	l.t.Log(s)
}

// sinceBegan is true time, which a bubble does not have.
func (l *longRun) sinceBegan() (d time.Duration) {
	l.sink.do(func() { d = time.Since(l.began) })
	return d
}

// recipe sends the arm to and fro: every reading is a move, a proof, a gate and a proof.
func (l *longRun) recipe() string {
	return fmt.Sprintf("title: To and fro\nsweep: [{axis: signal_arm, at: [2.8 deg, 2.9 deg]}]\ndwell: 10 ms\nrepeat: {times: %d, as: passes}\n", l.each/2)
}

// live executes the runs, one after another as they are asked for. It is called in a bubble.
func (l *longRun) live(f *bench.File) error {
	virtual, err := bench.NewVirtual(f, bench.VirtualOptions{Ledger: instruments.WriteOnly(nil)})
	if err != nil {
		return err
	}
	book, err := logbook.Open(l.data)
	if err != nil {
		return err
	}
	defer book.Close()
	built, err := bench.Build(f, bench.Options{Virtual: virtual})
	if err != nil {
		return err
	}
	carrier := courier.New(f.Name, book, l.sink, func(err error) {
		if err != nil {
			l.told = append(l.told, err.Error())
		}
	})
	book.OnAppend(carrier.Nudge)
	kit := &kit{Night: Night{Bench: f}}
	over := make(chan protocol.Event, 1)
	keep := keeper.New(keeper.Config{Book: book, Bench: &built.Bench, BenchText: f.Text, Version: "test", Plan: kit.plan,
		Told: func(ev protocol.Event) {
			if ev.Kind == protocol.Ended {
				over <- ev
			}
		},
		Step: func(s engine.Step) {
			if s != engine.StepWritten {
				return
			}
			if l.written++; l.written%(l.each/perRun) == 0 {
				l.sample()
			}
		},
	})
	all := crew.New(context.Background(), nil)
	for _, a := range slices.Concat(virtual.Actors(), built.Actors()) {
		all.Go(a.Name, a.Run)
	}
	all.Go("courier", carrier.Run)
	all.Go("keeper", keep.Run)
	for i := range longRuns {
		_, err := keep.Enqueue(context.Background(), protocol.StartRequest{Recipe: l.recipe(), Key: fmt.Sprint("run ", i+1), Who: "nighttest"})
		if err != nil {
			return err
		}
		select {
		case ev := <-over:
			if ev.State != protocol.Finished {
				l.t.Errorf("run %d is %s (%s); want finished", i+1, ev.State, ev.Text)
			}
		case <-all.Context().Done():
			return all.Wait()
		}
	}
	synctest.Wait()
	for range 100 {
		if carrier.Behind() == 0 {
			break
		}
		time.Sleep(time.Second)
	}
	if n := carrier.Behind(); n != 0 {
		l.t.Errorf("%d entries are not published at the end (%v); want all", n, carrier.Trouble())
	}
	all.Stop()
	return all.Wait()
}

// TestLongRunning takes many readings with everything that a daemon is made of, and demands that it
// holds no more at the end than it held in the middle.
func TestLongRunning(t *testing.T) {
	many := *readingsFlag
	if many == 0 {
		if many = 4800; testing.Short() || raced {
			many = 1200
		}
	}
	f, err := AtClockOne("lean.yaml", []byte(leanBench))
	if err != nil {
		t.Fatal(err)
	}
	l := &longRun{t: t, data: t.TempDir(), began: time.Now(), samples: make([]sample, 0, longRuns*perRun)}
	const whole = 2 * perRun // each part of a run is whole passes of two readings
	l.each = max(whole, (many/longRuns+whole-1)/whole*whole)
	b, err := broker.New(broker.Config{Bench: f.Name, Dir: t.TempDir()})
	if err != nil {
		t.Fatal(err)
	}
	server := crew.New(context.Background(), nil)
	server.Go("broker", b.Run)
	defer func() {
		server.Stop()
		if err := server.Wait(); err != nil {
			t.Error(err)
		}
	}()
	select {
	case <-b.Ready():
	case <-server.Context().Done():
		t.Fatal(server.Wait())
	}
	conn, err := b.Connect("long")
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close()
	// The window of the server's own duplicates is ten minutes of ids, which at these rates would be
	// a million of them; and the stream is at its limit soon, as after years.
	l.sink.stream, err = courier.NewStream(conn, courier.StreamConfig{Bench: f.Name, Own: true, Duplicates: time.Second, MaxBytes: 16 << 20})
	if err != nil {
		t.Fatal(err)
	}
	l.sink.outside = newOutside()
	go l.sink.serve()
	defer close(l.sink.ask)
	synctest.Test(t, func(t *testing.T) {
		if err := l.live(f); err != nil {
			t.Fatal(err)
		}
	})
	l.flat()
	l.complete()
}

// flat compares the last third of the samples with the one before it.
func (l *longRun) flat() {
	t := l.t
	if len(l.samples) != longRuns*perRun {
		t.Fatalf("%d samples; want %d", len(l.samples), longRuns*perRun)
	}
	third := len(l.samples) / 3
	before, last := l.samples[third:2*third], l.samples[2*third:]
	between := float64(last[0].readings - before[0].readings)
	heap := func(s sample) float64 { return float64(s.heap) }
	grown := median(last, heap) - median(before, heap)
	t.Logf("heap: %.2f MiB in the second third, %.2f MiB in the last, %.0f readings later (%+.1f bytes a reading)", median(before, heap)/(1<<20), median(last, heap)/(1<<20), between, grown/between)
	if most := heapNoise + perReading*between; grown > most {
		t.Errorf("the heap grew by %.0f bytes in %.0f readings; want at most %.0f", grown, between, most)
	}
	var slopes []float64
	for run := range longRuns {
		a, b := l.samples[run*perRun], l.samples[run*perRun+perRun-1]
		slopes = append(slopes, float64(int64(b.heap)-int64(a.heap)))
	}
	slices.Sort(slopes)
	within, over := slopes[len(slopes)/2], float64(l.each*(perRun-1)/perRun)
	t.Logf("heap: %+.0f bytes within a run of %d readings, %+.1f a reading", within, l.each, within/over)
	if most := slopeNoise + perVisit*over; within > most {
		t.Errorf("the heap grew by %.0f bytes within a run, over %.0f readings; want at most %.0f", within, over, most)
	}
	for _, c := range []struct {
		what string
		of   func(sample) float64
		more float64
	}{
		{"goroutines", func(s sample) float64 { return float64(s.goroutines) }, 0},
		{"descriptors", func(s sample) float64 { return float64(s.files) }, lateReaders},
	} {
		if a, b := median(before, c.of), median(last, c.of); b > a+c.more {
			t.Errorf("%s: %g in the second third, %g in the last; want at most %g", c.what, a, b, a+c.more)
		}
	}
	for _, s := range l.samples {
		if s.wal > mostWAL {
			t.Errorf("the write-ahead log has %d bytes after %d readings; want at most %d", s.wal, s.readings, mostWAL)
		}
	}
}

func median(all []sample, of func(sample) float64) float64 {
	var values []float64
	for _, s := range all {
		values = append(values, of(s))
	}
	slices.Sort(values)
	return values[len(values)/2]
}

// complete demands that nothing was lost on the way: each run has its readings, and the stream ends
// where the journal does, as long as it.
func (l *longRun) complete() {
	t, ctx := l.t, l.t.Context()
	for _, text := range l.told {
		t.Errorf("the courier had trouble: %s", text)
	}
	book, err := logbook.OpenReadOnly(filepath.Join(l.data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	if wrong := book.Verify(ctx); len(wrong) > 0 {
		t.Errorf("the logbook is not whole: %s", strings.Join(wrong, "; "))
	}
	runs, err := book.Runs(ctx)
	if err != nil {
		t.Fatal(err)
	}
	if len(runs) != longRuns {
		t.Errorf("%d runs; want %d", len(runs), longRuns)
	}
	entries, accepted := int64(0), 0
	for _, run := range runs {
		last, err := book.Last(ctx, run.Run)
		if err != nil {
			t.Fatal(err)
		}
		entries += last
		seen := map[[2]int]bool{}
		for r, err := range book.Readings(ctx, run.Run) {
			if err != nil {
				t.Fatal(err)
			}
			if !r.Accepted || r.Point == nil || r.Visit == nil || seen[[2]int{*r.Point, *r.Visit}] {
				t.Fatalf("run %s: reading %d is not accepted, or not the first of its visit", run.Run, r.Sequence)
			}
			seen[[2]int{*r.Point, *r.Visit}] = true
		}
		if len(seen) != l.each {
			t.Errorf("run %s has %d readings; want %d", run.Run, len(seen), l.each)
		}
		accepted += len(seen)
	}
	bench, err := book.Last(ctx, protocol.BenchRun)
	if err != nil {
		t.Fatal(err)
	}
	entries += bench
	end, err := l.sink.stream.Last(ctx)
	if err != nil {
		t.Fatal(err)
	}
	if int64(end.Sequence) != entries || end.Renew != nil {
		t.Errorf("the stream ends in message %d; want %d, as the journal has, and no gap", end.Sequence, entries)
	}
	var last protocol.Head
	if err := json.Unmarshal(end.Body, &last); err != nil || last.Run != runs[len(runs)-1].Run {
		t.Errorf("the stream ends in %s of %s (%v); want the end of the last run, %s", end.ID, last.Run, err, runs[len(runs)-1].Run)
	}
	t.Logf("%d readings in %d entries, all published", accepted, entries)
}
