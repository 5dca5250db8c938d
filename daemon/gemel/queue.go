package main

import (
	"context"
	"fmt"
	"time"

	"gemel/protocol"
	"gemel/protocol/client"
)

type queueCommand struct {
	remoteFlags
	First    []string `placeholder:"RUN" help:"Put these runs first, in this order." xor:"queue"`
	Withdraw []string `placeholder:"RUN" help:"Stop these runs for ever, while they wait." xor:"queue"`
}

func (queueCommand) Help() string {
	return `Example:
  gemel queue
  gemel queue --first 20310203-213000-5f0c1a2b
  gemel queue --withdraw 20310203-213000-5f0c1a2b

Without a flag it lists the runs that wait, the next first; gemel status tells of the one that is being executed. --first A,B makes A the next and B the one after it, and leaves the others behind them as they are; on a real bench it must be armed, for it decides what moves next. A run that was interrupted goes on before all others. --withdraw needs no arming; a run that has begun is stopped by gemel stop. The order survives a restart.`
}

func (c *queueCommand) Run(ctx context.Context, con *console) error {
	role := protocol.ControlRole
	if len(c.First)+len(c.Withdraw) == 0 {
		role = protocol.WatchRole
	}
	return c.with(ctx, role, func(ctx context.Context, cl *client.Client) error {
		for _, run := range c.Withdraw {
			r, err := cl.Withdraw(ctx, protocol.RunRequest{Run: protocol.RunID(run), Who: whoami()})
			if err != nil {
				return err
			}
			if !r.Recorded {
				fmt.Fprintf(con.err, "run %s is %s; done, not recorded: nothing can be written at the moment\n", r.Run, r.State)
			}
		}
		reply, err := c.list(ctx, cl)
		switch {
		case err != nil:
			return err
		case c.JSON:
			return con.json(reply)
		}
		return con.queue(reply)
	})
}

func (c *queueCommand) list(ctx context.Context, cl *client.Client) (protocol.QueueReply, error) {
	if len(c.First) == 0 {
		return cl.Queue(ctx)
	}
	runs := make([]protocol.RunID, len(c.First))
	for i, run := range c.First {
		runs[i] = protocol.RunID(run)
	}
	return cl.Reorder(ctx, protocol.ReorderRequest{Runs: runs, Who: whoami()})
}

// queue prints the runs that wait, one a line.
func (c *console) queue(q protocol.QueueReply) error {
	if len(q.Queue) == 0 {
		fmt.Fprintf(c.out, "No run waits on bench %s.\n", q.Bench)
		return nil
	}
	fmt.Fprintf(c.out, "%s on bench %s, the next first:\n", map[bool]string{true: "One run waits", false: fmt.Sprintf("%d runs wait", len(q.Queue))}[len(q.Queue) == 1], q.Bench)
	for _, r := range q.Queue {
		fmt.Fprintf(c.out, "  %s  %q", r.Run, r.Title)
		if r.ReadingsPlanned != nil {
			fmt.Fprintf(c.out, ", %s", count(*r.ReadingsPlanned, "reading"))
		}
		fmt.Fprintf(c.out, ", asked for at %s by %s", r.QueuedAt.Local().Format(time.DateTime), orElse(r.Who, "somebody who gave no name"))
		if r.State != protocol.Queued {
			fmt.Fprint(c.out, "; it was interrupted, and goes on before the others")
		}
		fmt.Fprintln(c.out)
	}
	return nil
}
