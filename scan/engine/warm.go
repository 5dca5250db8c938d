package engine

import (
	"context"
	"fmt"
	"math"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// warmEvery bounds the time between two looks at a sensor that has to become steady.
const warmEvery = 30 * time.Second

// warmUp is what was seen of the sensors that have to become steady. It lives in memory: after a
// restart nobody knows what the bench did meanwhile, and it is watched anew.
type warmUp struct {
	since time.Time
	seen  []samples // by sensor of the plan's list
	last  error
}

type sample struct {
	at    time.Time
	value float64
}

// samples are in the order of time, the first no younger than what is asked for.
type samples []sample

func (q samples) length() time.Duration { return q[len(q)-1].at.Sub(q[0].at).Round(time.Second) }

// spread is how far the values are apart, and what share of their mean that is. full says that they
// cover the time.
func (q samples) spread(over time.Duration) (spread, relative float64, full bool) {
	low, high, sum := q[0].value, q[0].value, 0.0
	for _, s := range q {
		low, high = min(low, s.value), max(high, s.value)
		sum += s.value
	}
	spread = high - low
	if mean := math.Abs(sum / float64(len(q))); mean > 0 {
		relative = spread / mean
	} else if spread > 0 {
		relative = math.Inf(1)
	}
	return spread, relative, len(q) > 2 && q[len(q)-1].at.Sub(q[0].at) >= over
}

// warming waits, at rest, until every sensor is steady. waited says that the loop has to look again.
func (e *Engine) warming(ctx context.Context) (waited bool, err error) {
	w := e.Plan.Schedule.WarmUp
	if w == nil || e.progress.warm {
		return false, nil
	}
	if e.warm == nil {
		e.warm = &warmUp{since: e.now(), seen: make([]samples, len(w.Steady))}
	}
	op, end := e.operation(ctx)
	defer end()
	every := warmEvery
	var words []string
	steady := true
	for i, s := range w.Steady {
		every = min(every, s.Over/20)
		if err := e.look(op, s, &e.warm.seen[i]); err != nil {
			if op.Err() != nil {
				return true, nil
			}
			e.warm.last, steady = err, false
			e.warm.seen[i] = nil // a gap might hide what moved
			continue
		}
		spread, relative, full := e.warm.seen[i].spread(s.Over)
		bad := spread > s.Absolute
		if s.Relative > 0 {
			bad = relative > s.Relative
		}
		if !full || bad {
			steady = false
			e.warm.last = fmt.Errorf("%s varied by %.3g %s (%.3g %%) in %s", s.Sensor, spread, e.sensor(s.Sensor).Unit(), 100*relative, unit.Span(e.warm.seen[i].length()))
			continue
		}
		words = append(words, fmt.Sprintf("%s varied by %.3g %s (%.3g %%) in %s", s.Sensor, spread, e.sensor(s.Sensor).Unit(), 100*relative, unit.Span(s.Over)))
	}
	early := !e.Plan.Schedule.NotBefore.IsZero() && e.now().Before(e.Plan.Schedule.NotBefore)
	switch {
	case steady && !early: // judged when counting may begin, not hours before
		e.warm = nil
		return true, e.note(ctx, protocol.GuardMended, "steady: "+strings.Join(words, ", "), map[string]any{"warm_up": true})
	case !early && !steady && w.AtMost > 0 && e.now().Sub(e.warm.since) > w.AtMost && e.now().Sub(e.Plan.Schedule.NotBefore) > w.AtMost:
		last := e.warm.last
		e.warm = nil
		return true, e.holdFor(ctx, protocol.ByTrouble, fmt.Sprintf("held: not steady within %s: %s", unit.Span(w.AtMost), firstLine(last)), map[string]any{"warm_up": false})
	}
	_ = e.Bench.Pace.Wait(op, max(every, 100*time.Millisecond))
	return true, nil
}

// look reads a sensor once, and forgets what is older than needed.
func (e *Engine) look(ctx context.Context, s scan.Steady, seen *samples) error {
	sensor := e.sensor(s.Sensor)
	value, err := sensor.Read(ctx)
	if err != nil && ctx.Err() == nil {
		if err = sensor.Connect(ctx); err == nil {
			value, err = sensor.Read(ctx)
		}
	}
	if err != nil {
		return err
	}
	*seen = append(*seen, sample{e.now(), value})
	// One that is older than the time asked for has to stay, or it would never be covered.
	for len(*seen) > 2 && e.now().Sub((*seen)[1].at) >= s.Over {
		*seen = (*seen)[1:]
	}
	return nil
}
