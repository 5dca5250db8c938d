package keeper

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
	"gemel/scan/engine"
)

// turn finds whose turn it is and puts an engine of that run in charge; no engine: nobody waits, or
// that run was ended without one. A long recipe takes a while to be worked out, and nobody waits
// for that: whether the run is still the first is looked at again under the lock.
func (k *Keeper) turn(ctx context.Context) (eng *engine.Engine, idle bool, err error) {
	for {
		queue, err := k.Book.Queue(ctx)
		if err != nil || len(queue) == 0 {
			return nil, len(queue) == 0, err
		}
		first := queue[0].Run
		row, err := k.Book.Run(ctx, first)
		if err != nil {
			return nil, false, err
		}
		plan, planErr, err := k.workOut(ctx, row)
		if err != nil {
			return nil, false, err
		}
		eng, err := k.take(ctx, row, plan, planErr, func() (bool, error) {
			queue, err := k.Book.Queue(ctx)
			return err == nil && len(queue) > 0 && queue[0].Run == first, err
		})
		if !errors.Is(err, errNotFirst) {
			return eng, false, err
		}
	}
}

var errNotFirst = errors.New("another run goes first by now")

// workOut makes the plan of a run: with the values its journal has, and if its points are not
// decided yet with those there are now. planErr is why there can be none; err, that the logbook
// could not be read, says nothing about the run.
func (k *Keeper) workOut(ctx context.Context, row logbook.RunRow) (plan scan.Plan, planErr, err error) {
	if row.BenchText != k.BenchText {
		return plan, errBenchChanged, nil
	}
	earlier, err := k.earlierOf(ctx, row.Run)
	if err != nil {
		return plan, nil, err
	}
	plan, planErr = k.plan(row, earlier.find)
	return plan, planErr, earlier.broken
}

func (k *Keeper) plan(row logbook.RunRow, earlier func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
	plan, err := k.Plan(row.RecipeText, row.QueuedAt.Time, earlier)
	plan.Repeat.Seed = shuffleSeed(row.Run)
	return plan, err
}

var errBenchChanged = errors.New("the bench file was changed after the run was asked for, so the logbook's copy would not be the one in use; start it anew")

// take puts the engine of a run in charge, or ends a run that cannot be executed.
func (k *Keeper) take(ctx context.Context, row logbook.RunRow, plan scan.Plan, planErr error, first func() (bool, error)) (*engine.Engine, error) {
	k.order.Lock()
	defer k.order.Unlock()
	if is, err := first(); err != nil || !is {
		return nil, errors.Join(err, errNotFirst)
	}
	if k.handSession() != nil {
		return nil, nil // a person has the bench; the run waits
	}
	past, err := k.fold(ctx, row.Run)
	if err != nil || past.State.Final() {
		return nil, err
	}
	if planErr != nil {
		text := "failed: " + planErr.Error()
		if _, found := errors.AsType[*strict.Error](planErr); found {
			text = "failed: the recipe does not fit the bench any more: " + planErr.Error()
		}
		_, err := k.endWaiting(ctx, row, protocol.Failed, text, nil)
		return nil, err
	}
	eng := k.engine(row, plan, past)
	k.mu.Lock()
	k.current, k.row = eng, row
	k.mu.Unlock()
	return eng, nil
}

// Queue lists the runs that wait, the next first.
func (k *Keeper) Queue(ctx context.Context) (protocol.QueueReply, error) {
	waiting, err := k.waiting(ctx)
	reply := protocol.QueueReply{Bench: k.Bench.Name, Queue: []protocol.QueuedRun{}}
	for _, w := range waiting {
		reply.Queue = append(reply.Queue, protocol.QueuedRun{Run: w.Run, Title: w.Title, QueuedAt: w.QueuedAt, Who: w.Who, State: w.State, ReadingsPlanned: w.Readings})
	}
	return reply, err
}

// waiting lists the runs that no engine executes.
func (k *Keeper) waiting(ctx context.Context) ([]logbook.Waiting, error) {
	all, err := k.Book.Queue(ctx)
	k.mu.Lock()
	defer k.mu.Unlock()
	return slices.DeleteFunc(all, func(w logbook.Waiting) bool { return k.current != nil && w.Run == k.row.Run }), err
}

// Reorder puts the runs it names first in the queue. It decides what moves next, so the bench must
// be armed.
func (k *Keeper) Reorder(ctx context.Context, q protocol.ReorderRequest) (protocol.QueueReply, error) {
	if !k.Armed(time.Now()) {
		return protocol.QueueReply{}, notArmed()
	}
	if err := k.reorder(ctx, q); err != nil {
		if errors.Is(err, logbook.ErrFull) {
			err = protocol.Refuse(503, "nothing can be written, so the order stays: "+err.Error())
		}
		return protocol.QueueReply{}, err
	}
	return k.Queue(ctx)
}

func (k *Keeper) reorder(ctx context.Context, q protocol.ReorderRequest) error {
	if len(q.Runs) == 0 {
		return protocol.Refuse(400, "no runs; want the ones that are to go first, in their order")
	}
	k.order.Lock()
	defer k.order.Unlock()
	waiting, err := k.waiting(ctx)
	if err != nil {
		return err
	}
	order := []protocol.RunID{}
	titles := []string{}
	for _, run := range q.Runs {
		i := slices.IndexFunc(waiting, func(w logbook.Waiting) bool { return w.Run == run })
		switch {
		case slices.Contains(order, run):
			return protocol.Refuse(400, fmt.Sprintf("run %s is named twice; want each run once", run))
		case i < 0:
			return k.notWaiting(ctx, run)
		case waiting[i].State != protocol.Queued:
			return protocol.Refuse(409, fmt.Sprintf("run %s was interrupted, and goes on before all others; it can be stopped", run))
		}
		order = append(order, run)
		titles = append(titles, fmt.Sprintf("%q", waiting[i].Title))
	}
	before := []protocol.RunID{}
	for _, w := range waiting {
		if w.State != protocol.Queued {
			continue
		}
		before = append(before, w.Run)
		if !slices.Contains(order, w.Run) {
			order = append(order, w.Run)
		}
	}
	if slices.Equal(order, before) {
		return nil // asked again: nothing has to be written
	}
	const most = 5 // in one sentence
	if len(titles) > most {
		titles = append(titles[:most], "…")
	}
	text := fmt.Sprintf("the queue was reordered by %s: first %s", who(q.Who), strings.Join(titles, ", "))
	return k.benchEvent(ctx, protocol.OperatorDid, text, map[string]any{logbook.QueueDetail: order, "who": q.Who})
}

// notWaiting says why a run is not in the queue.
func (k *Keeper) notWaiting(ctx context.Context, run protocol.RunID) error {
	row, err := k.unfinished(ctx, run)
	if err == nil {
		err = protocol.Refuse(409, fmt.Sprintf("run %s is %s, and does not wait any more", run, row.State))
	}
	return err
}

// unfinished finds a run that has not ended.
func (k *Keeper) unfinished(ctx context.Context, run protocol.RunID) (logbook.RunRow, error) {
	row, err := k.Book.Run(ctx, run)
	switch {
	case errors.Is(err, logbook.ErrNoRun):
		return row, protocol.Refuse(404, fmt.Sprintf("no run %q on this bench", run))
	case err == nil && row.State.Final():
		return row, protocol.Refuse(409, fmt.Sprintf("run %s is %s, for ever", run, row.State))
	}
	return row, err
}

// Withdraw stops a run that waits in the queue, and no other: what has begun is stopped by Stop.
func (k *Keeper) Withdraw(ctx context.Context, q protocol.RunRequest) (protocol.RunReply, error) {
	eng, err := k.find(ctx, q)
	if err != nil {
		return protocol.RunReply{}, err
	}
	if eng == nil {
		row, err := k.unfinished(ctx, q.Run)
		if err == nil && row.State != protocol.Queued {
			err = protocol.Refuse(409, fmt.Sprintf("run %s has begun and was interrupted; it can be stopped", q.Run))
		}
		if err != nil {
			return protocol.RunReply{}, err
		}
		reply, err := k.stopQueued(ctx, q)
		if !errors.Is(err, errBegan) {
			return reply, err
		}
	}
	return protocol.RunReply{}, protocol.Refuse(409, fmt.Sprintf("run %s is being executed; it can be stopped", q.Run))
}

var errBegan = errors.New("its turn has come")

// stopQueued ends a run that waits. When its turn came meanwhile, that is errBegan.
func (k *Keeper) stopQueued(ctx context.Context, q protocol.RunRequest) (protocol.RunReply, error) {
	k.order.Lock()
	defer k.order.Unlock()
	if k.executing(q.Run) != nil {
		return protocol.RunReply{}, errBegan
	}
	row, err := k.unfinished(ctx, q.Run)
	if err != nil {
		return protocol.RunReply{}, err
	}
	reply := protocol.RunReply{Run: q.Run, State: protocol.Stopped, Causes: []protocol.Cause{}, Recorded: true}
	reply.Rest, err = k.endWaiting(ctx, row, protocol.Stopped, "stopped in the queue by "+who(q.Who), map[string]any{"who": q.Who})
	if errors.Is(err, logbook.ErrFull) {
		reply.Recorded = false
		err = k.owe(q)
	}
	return reply, err
}

// busy says whether some run is being executed. Under order nothing can begin to be.
func (k *Keeper) busy() bool {
	k.mu.Lock()
	defer k.mu.Unlock()
	return k.current != nil
}

// endWaiting ends a run that no engine executes. What had begun was interrupted first, and that is
// told: what was counted at that moment is lost. The process that died may have left the bench hot,
// and perhaps nobody has brought it to rest yet: that comes first, unless another run has the bench.
// restBad is what of that was not reached; each entry says it, from the first on.
func (k *Keeper) endWaiting(ctx context.Context, row logbook.RunRow, state protocol.State, text string, detail map[string]any) (restBad string, err error) {
	past, err := k.fold(ctx, row.Run)
	if err != nil {
		return "", err
	}
	add := func(kind protocol.EventKind, text string, state protocol.State, causes []protocol.Cause, detail map[string]any) error {
		err := k.append(ctx, row.Run, past.Next, past.LastAt, kind, text, state, causes, detail)
		if err == nil {
			past.Next++
		}
		return err
	}
	if past.State != protocol.Queued {
		if !k.busy() {
			restBad = engine.Rest(ctx, k.Bench)
		}
		causes := past.Causes
		if !slices.Contains(causes, protocol.ByRestart) {
			causes = append(slices.Clone(causes), protocol.ByRestart)
			err := add(protocol.Interrupted, "interrupted: the program ended without a word; what was being counted is lost, nothing that was written is"+notAtRest(restBad),
				protocol.Holding, causes, map[string]any{"after_sequence": past.Next - 1})
			if err != nil {
				return restBad, err
			}
		}
		for _, d := range past.Unverified(k.axesOf(row)) {
			if err := add(protocol.Doubted, d.Text+notAtRest(restBad), protocol.Holding, causes, d.Detail); err != nil {
				return restBad, err
			}
		}
	}
	return restBad, add(protocol.Ended, text+notAtRest(restBad), state, nil, detail)
}

// axesOf lists the axes of the bench file under which a run began: the one of today may not say any
// more that a zero was to be verified.
func (k *Keeper) axesOf(row logbook.RunRow) []scan.Axis {
	if row.BenchText != k.BenchText && k.Axes != nil {
		if axes, err := k.Axes(row.BenchText); err == nil {
			return axes
		}
	}
	return k.Bench.Axes
}
