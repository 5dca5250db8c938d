package keeper

import (
	"context"
	"errors"
	"slices"

	"gemel/daemon/logbook"
	"gemel/protocol"
)

// owe keeps a stop that the journal had no room for where it survives the end of the program. The
// caller holds order.
func (k *Keeper) owe(q protocol.RunRequest) error {
	owed, err := k.Book.Owed()
	if err != nil {
		owed = nil // what cannot be read is lost; this one need not be
	}
	if slices.ContainsFunc(owed, func(s logbook.OwedStop) bool { return s.Run == q.Run }) {
		return nil
	}
	return k.Book.Owe(append(owed, logbook.OwedStop{Run: q.Run, Who: who(q.Who)}))
}

// oweUnrecorded keeps a stop that an engine carried out and could not write. What fails here makes it
// no worse: it is done, and was answered "not recorded".
func (k *Keeper) oweUnrecorded(q protocol.RunRequest, reply protocol.RunReply, err error) {
	if err != nil || reply.Recorded {
		return
	}
	k.order.Lock()
	defer k.order.Unlock()
	_ = k.owe(q)
}

// payOwed writes the stops that were carried out when the journal had no room. It is asked when no
// engine executes a run, and no run begins before it succeeds.
func (k *Keeper) payOwed(ctx context.Context) error {
	k.order.Lock()
	defer k.order.Unlock()
	owed, err := k.Book.Owed()
	if err != nil {
		// Nobody can know what it said. A run that was stopped goes on then as after any other restart.
		if werr := k.benchEvent(ctx, protocol.Trouble, "stops that were kept on a full disk cannot be read: "+err.Error(), nil); werr != nil {
			return werr
		}
		return k.Book.Owe(nil)
	}
	if len(owed) == 0 {
		return nil
	}
	for _, s := range owed {
		row, err := k.Book.Run(ctx, s.Run)
		switch {
		case errors.Is(err, logbook.ErrNoRun):
			continue
		case err != nil:
			return err
		case row.State.Final():
			continue // it was written before the program ended
		}
		if _, err := k.endWaiting(ctx, row, protocol.Stopped, "stopped by "+s.Who+", while nothing could be written", map[string]any{"who": s.Who}); err != nil {
			return err
		}
	}
	return k.Book.Owe(nil)
}
