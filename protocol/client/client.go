// Package client is how a Go program talks to a bench: the commands of gemel use it, and other
// people's programs may. It speaks the contract of package protocol over NATS and adds nothing
// to it: whatever it does, a plain NATS client can do. A refused request is a
// *protocol.Refusal with the daemon's code and findings.
package client

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"strconv"
	"strings"
	"sync"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nuid"

	"gemel/protocol"
)

// requestTime bounds a request whose context has no deadline.
const requestTime = 30 * time.Second

// Headers of a refused request, as NATS services send them.
const (
	errorHeader     = "Nats-Service-Error"
	errorCodeHeader = "Nats-Service-Error-Code"
)

// Client is a connection to one bench. Its methods may be called from several goroutines.
type Client struct {
	conn  *nats.Conn
	bench string

	mu      sync.Mutex
	waiting map[*question]bool
}

// question is a request that waits for its answer.
type question struct {
	subject string
	cancel  context.CancelCauseFunc
}

// Connect opens a connection to a bench. It does not ask whether a daemon is there.
func Connect(o Options) (*Client, error) {
	if !protocol.IsToken(o.Bench) {
		return nil, fmt.Errorf("bench %q; want a name of letters, digits, - and _", o.Bench)
	}
	c := &Client{bench: o.Bench, waiting: map[*question]bool{}}
	var err error
	c.conn, err = o.Dial(nats.ErrorHandler(c.refused))
	return c, err
}

// refused ends the questions that the broker does not allow. It says so beside the request, which
// itself would only time out.
func (c *Client) refused(_ *nats.Conn, _ *nats.Subscription, err error) {
	if !errors.Is(err, nats.ErrPermissionViolation) {
		return
	}
	c.mu.Lock()
	defer c.mu.Unlock()
	for q := range c.waiting {
		if strings.Contains(err.Error(), strconv.Quote(q.subject)) {
			q.cancel(ErrForbidden)
		}
	}
}

// ConnectFolder opens a connection to the daemon of a data folder. It fails with ErrNotRunning
// or ErrGone when there is none.
func ConnectFolder(folder, role string) (*Client, error) {
	o, err := FromFolder(folder, role)
	if err != nil {
		return nil, err
	}
	c, err := Connect(o)
	if errors.Is(err, nats.ErrNoServers) {
		return nil, fmt.Errorf("%s: nobody answers at %s: %w", folder, o.URL, ErrGone)
	}
	return c, err
}

// Close ends the connection.
func (c *Client) Close() { c.conn.Close() }

// Bench is the name of the bench this client talks to.
func (c *Client) Bench() string { return c.bench }

// Start asks for a run. Without a key one is made up, so that a request is still at most one
// run; a caller that wants to ask again must bring its own. Without an expiry the context's
// deadline is it: nobody waits for the run after that.
func (c *Client) Start(ctx context.Context, r protocol.StartRequest) (protocol.StartReply, error) {
	if r.Key == "" {
		r.Key = nuid.Next()
	}
	r.ExpiresAt = expiry(ctx, r.ExpiresAt)
	return ask[protocol.StartReply](ctx, c, "start", r)
}

// Stop asks to end a run. It has no expiry unless the request brings one: late is better than
// not at all.
func (c *Client) Stop(ctx context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return ask[protocol.RunReply](ctx, c, "stop", r)
}

// StopAfterPoint asks to end a run when its open point is done and the closing darks, backgrounds and
// references are taken. It is answered at the end of the slice that is open, so give it time.
func (c *Client) StopAfterPoint(ctx context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return ask[protocol.RunReply](ctx, c, "stop_after_point", r)
}

// Hold asks a run to hold. It has no expiry unless the request brings one.
func (c *Client) Hold(ctx context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return ask[protocol.RunReply](ctx, c, "hold", r)
}

// Resume asks a holding run to go on. It expires like Start.
func (c *Client) Resume(ctx context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	r.ExpiresAt = expiry(ctx, r.ExpiresAt)
	return ask[protocol.RunReply](ctx, c, "resume", r)
}

// Status asks for the live state of the bench.
func (c *Client) Status(ctx context.Context) (protocol.Status, error) {
	return ask[protocol.Status](ctx, c, "status", struct{}{})
}

// Queue asks for the runs that wait, the next first.
func (c *Client) Queue(ctx context.Context) (protocol.QueueReply, error) {
	return ask[protocol.QueueReply](ctx, c, "queue", struct{}{})
}

// Reorder asks to put the runs it names first in the queue. It expires like Start.
func (c *Client) Reorder(ctx context.Context, r protocol.ReorderRequest) (protocol.QueueReply, error) {
	r.ExpiresAt = expiry(ctx, r.ExpiresAt)
	return ask[protocol.QueueReply](ctx, c, "reorder", r)
}

// Withdraw asks to stop a run that waits in the queue, and no other. It has no expiry unless the
// request brings one.
func (c *Client) Withdraw(ctx context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return ask[protocol.RunReply](ctx, c, "withdraw", r)
}

// Forecast asks what a recipe would do; nothing moves for it. It expires like Start.
func (c *Client) Forecast(ctx context.Context, r protocol.ForecastRequest) (protocol.Forecast, error) {
	r.ExpiresAt = expiry(ctx, r.ExpiresAt)
	return ask[protocol.Forecast](ctx, c, "forecast", r)
}

func expiry(ctx context.Context, given *protocol.Time) *protocol.Time {
	if deadline, ok := ctx.Deadline(); ok && given == nil {
		return &protocol.Time{Time: deadline}
	}
	return given
}

func ask[Reply any](ctx context.Context, c *Client, verb string, request any) (Reply, error) {
	var reply Reply
	body, err := json.Marshal(request)
	if err != nil {
		return reply, err
	}
	if _, ok := ctx.Deadline(); !ok {
		var cancel context.CancelFunc
		ctx, cancel = context.WithTimeout(ctx, requestTime)
		defer cancel()
	}
	subject := protocol.DoSubject(c.bench, verb)
	answer, err := c.request(ctx, subject, body)
	switch {
	case errors.Is(err, nats.ErrNoResponders):
		return reply, fmt.Errorf("%s: %w", subject, ErrNoDaemon)
	case err != nil:
		return reply, fmt.Errorf("%s: %w", subject, err)
	}
	if err := refusal(answer); err != nil {
		return reply, err
	}
	if err := json.Unmarshal(answer.Data, &reply); err != nil {
		return reply, fmt.Errorf("%s: answer: %w", subject, err)
	}
	return reply, nil
}

func (c *Client) request(ctx context.Context, subject string, body []byte) (*nats.Msg, error) {
	ctx, done := c.refusable(ctx, subject)
	defer done()
	answer, err := c.conn.RequestWithContext(ctx, subject, body)
	if err != nil && context.Cause(ctx) != nil {
		return nil, context.Cause(ctx)
	}
	return answer, err
}

// refusable gives a context that ends, with ErrForbidden as its cause, when the broker refuses
// to let us publish on subject.
func (c *Client) refusable(ctx context.Context, subject string) (_ context.Context, done func()) {
	ctx, cancel := context.WithCancelCause(ctx)
	q := &question{subject: subject, cancel: cancel}
	c.mu.Lock()
	c.waiting[q] = true
	c.mu.Unlock()
	return ctx, func() {
		c.mu.Lock()
		delete(c.waiting, q)
		c.mu.Unlock()
		cancel(nil)
	}
}

// refusal reads the headers, since to NATS a refused request has succeeded.
func refusal(answer *nats.Msg) error {
	text := answer.Header.Get(errorHeader)
	code, err := strconv.Atoi(answer.Header.Get(errorCodeHeader))
	if text == "" && err != nil {
		return nil
	}
	r := protocol.Refuse(code, text)
	var p protocol.Problem
	if json.Unmarshal(answer.Data, &p) == nil && p.Error != "" {
		r.Problem = p
	}
	return r
}
