// Package remote answers the requests of other lab services on NATS, as the micro service
// "gemel". It decodes strictly, executes nothing whose expiry has passed by the time its turn
// comes, and hands the rest to the keeper, which alone decides. Each verb has its own
// subscription, so a stop is answered while a start is slow. A panic in a handler becomes an
// answer and a call of the hook; the daemon lives on.
package remote

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"regexp"
	"runtime/debug"
	"strconv"
	"strings"
	"sync"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/micro"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// Keeper is the life of the bench as the requests see it. An error that is or wraps a
// *protocol.Refusal is answered with its code and findings, any other with 500. The methods are
// called from several goroutines.
type Keeper interface {
	Start(context.Context, protocol.StartRequest) (protocol.StartReply, error)
	Stop(context.Context, protocol.RunRequest) (protocol.RunReply, error)
	Hold(context.Context, protocol.RunRequest) (protocol.RunReply, error)
	Resume(context.Context, protocol.RunRequest) (protocol.RunReply, error)
	Status(context.Context) protocol.Status
	Queue(context.Context) (protocol.QueueReply, error)
	Reorder(context.Context, protocol.ReorderRequest) (protocol.QueueReply, error)
	Withdraw(context.Context, protocol.RunRequest) (protocol.RunReply, error)
	StopAfterPoint(context.Context, protocol.RunRequest) (protocol.RunReply, error)
}

// Config names the service.
type Config struct {
	Bench   string
	Version string // of the program

	// Panicked is called in the handler's goroutine with what a handler panicked with. May be nil.
	Panicked func(verb string, value any, stack []byte)
}

// Name is the name of the service.
const Name = "gemel"

// Requests of one verb that wait their turn; what comes on top of them is not answered.
const (
	pendingRequests = 64
	pendingBytes    = 32 << 20
)

// Serve answers requests until ctx ends, and then returns nil after the handlers that run have
// answered. The handlers' context outlives ctx: what was begun is ended properly. The connection
// need not be up yet.
func Serve(ctx context.Context, conn *nats.Conn, keeper Keeper, c Config) error {
	service, err := micro.AddService(conn, micro.Config{
		Name: Name, Version: semantic(c.Version), Description: "control of a photon-pair bench",
		Metadata: map[string]string{"bench": c.Bench, "version": c.Version},
	})
	if err != nil {
		return fmt.Errorf("remote: %w", err)
	}
	h := &handlers{ctx: context.WithoutCancel(ctx), keeper: keeper, panicked: c.Panicked}
	defer h.end(service)
	add := func(verb string, handle micro.Handler) error {
		err := service.AddEndpoint(verb, handle, micro.WithEndpointSubject(protocol.DoSubject(c.Bench, verb)), micro.WithEndpointPendingLimits(pendingRequests, pendingBytes))
		if err != nil {
			return fmt.Errorf("remote: %s: %w", verb, err)
		}
		return nil
	}
	for verb, handle := range map[string]handler{
		"start":    h.start,
		"stop":     h.onRun(keeper.Stop),
		"hold":     h.onRun(keeper.Hold),
		"resume":   h.onRun(keeper.Resume),
		"queue":    h.queue,
		"reorder":  h.reorder,
		"withdraw": h.onRun(keeper.Withdraw),
		// A verb of its own: it waits for the end of a slice, and a stop must not wait behind it.
		"stop_after_point": h.onRun(keeper.StopAfterPoint),
		"forecast":         h.forecast,
	} {
		if err := add(verb, h.guarded(verb, handle)); err != nil {
			return err
		}
	}
	if hands, can := keeper.(Hands); can {
		if err := add("hand", h.hand(hands)); err != nil {
			return err
		}
	}
	// The last one, and the broker keeps their order: where a status is answered, everything is.
	if err := add("status", h.guarded("status", h.status)); err != nil {
		return err
	}
	<-ctx.Done()
	return nil
}

// handler answers one request: with a reply to be written as JSON, or an error.
type handler func(request []byte) (reply any, err error)

type handlers struct {
	ctx      context.Context
	keeper   Keeper
	panicked func(string, any, []byte)

	mu     sync.Mutex
	ending bool
	active sync.WaitGroup
}

// end stops taking requests and waits for those that are being executed.
func (h *handlers) end(service micro.Service) {
	h.mu.Lock()
	h.ending = true
	h.mu.Unlock()
	h.active.Wait()
	_ = service.Stop() // fails when the connection is gone, which is as well
}

func (h *handlers) enter() bool {
	h.mu.Lock()
	defer h.mu.Unlock()
	if h.ending {
		return false
	}
	h.active.Add(1)
	return true
}

func (h *handlers) guarded(verb string, handle handler) micro.Handler {
	return micro.HandlerFunc(func(r micro.Request) {
		if !own(r.Reply()) {
			return
		}
		if !h.enter() {
			refuse(r, protocol.Refuse(503, "the daemon is ending; nothing was done"))
			return
		}
		defer h.active.Done()
		defer func() {
			if v := recover(); v != nil {
				stack := debug.Stack()
				refuse(r, protocol.Refuse(500, fmt.Sprintf("%s: a defect of the daemon: %v", verb, v)))
				if h.panicked != nil {
					h.panicked(verb, v, stack)
				}
			}
		}()
		reply, err := handle(r.Data())
		if err != nil {
			refuse(r, err)
			return
		}
		body, err := json.Marshal(reply)
		if err != nil {
			refuse(r, fmt.Errorf("%s: %w", verb, err))
			return
		}
		// A requester that is gone is its own affair; the service counts the error.
		_ = r.Respond(body)
	})
}

// own says whether an answer may go to a reply subject. The service publishes with more rights than
// who asks: an answer on a subject of the bench or of the server would be an entry of the journal, a
// beat or a request that a watcher had it send. Such a request is not carried out either.
func own(reply string) bool {
	return !strings.HasPrefix(reply, "gemel.") && !strings.HasPrefix(reply, "$")
}

// refuse answers with the error headers and the findings.
func refuse(r micro.Request, err error) {
	refusal := protocol.Refuse(500, err.Error())
	if given, ok := errors.AsType[*protocol.Refusal](err); ok {
		refusal.Code = given.Code
		refusal.Findings = append(refusal.Findings, given.Findings...)
	}
	if refusal.Problem.Error == "" {
		refusal.Problem.Error = "refused without a reason"
	}
	body, err := json.Marshal(refusal.Problem)
	if err != nil {
		body = []byte("{}")
	}
	_ = r.Error(strconv.Itoa(refusal.Code), header(refusal.Problem.Error), body)
}

// header makes one line of an error's text; the body has all of it.
func header(text string) string {
	line := []rune(text)
	for i, c := range line {
		if c < ' ' || c == 0x7f {
			line[i] = ' '
		}
	}
	if len(line) > 500 {
		line = append(line[:500], '…')
	}
	return string(line)
}

func (h *handlers) start(data []byte) (any, error) {
	r, err := decode[protocol.StartRequest](data, maxStart)
	if err != nil {
		return nil, err
	}
	if err := inTime(r.ExpiresAt); err != nil {
		return nil, err
	}
	switch {
	case (r.Recipe == "") == (r.RecipeName == ""):
		return nil, protocol.Refuse(400, "start: recipe and recipe_name; want exactly one of them")
	case len(r.Recipe) > maxRecipe:
		return nil, protocol.Refuse(413, fmt.Sprintf("start: a recipe of %d bytes; want at most %d", len(r.Recipe), maxRecipe))
	case r.Key == "":
		return nil, protocol.Refuse(400, `start: no key; want one of your own making, the same when you ask again`)
	}
	if err := short("start", map[string]string{"key": r.Key, "who": r.Who, "recipe_name": r.RecipeName}); err != nil {
		return nil, err
	}
	reply, err := h.keeper.Start(h.ctx, r)
	if err != nil {
		return nil, err
	}
	return reply, nil
}

func (h *handlers) onRun(do func(context.Context, protocol.RunRequest) (protocol.RunReply, error)) handler {
	return func(data []byte) (any, error) {
		r, err := decode[protocol.RunRequest](data, maxSmall)
		if err != nil {
			return nil, err
		}
		if err := inTime(r.ExpiresAt); err != nil {
			return nil, err
		}
		if !protocol.IsToken(string(r.Run)) {
			return nil, protocol.Refuse(400, fmt.Sprintf("run %.80q; want the name of the run that is meant", r.Run))
		}
		if err := short("request", map[string]string{"who": r.Who}); err != nil {
			return nil, err
		}
		reply, err := do(h.ctx, r)
		if err != nil {
			return nil, err
		}
		if reply.Causes == nil {
			reply.Causes = []protocol.Cause{}
		}
		return reply, nil
	}
}

func (h *handlers) queue(data []byte) (any, error) {
	if len(data) > 0 {
		if _, err := decode[struct{}](data, maxSmall); err != nil {
			return nil, err
		}
	}
	return listed(h.keeper.Queue(h.ctx))
}

func (h *handlers) reorder(data []byte) (any, error) {
	r, err := decode[protocol.ReorderRequest](data, maxSmall)
	if err != nil {
		return nil, err
	}
	if err := inTime(r.ExpiresAt); err != nil {
		return nil, err
	}
	if n := len(r.Runs); n == 0 || n > protocol.MostQueued {
		return nil, protocol.Refuse(400, fmt.Sprintf("reorder: %d runs; want 1 to %d, the ones that are to go first", n, protocol.MostQueued))
	}
	for _, run := range r.Runs {
		if !protocol.IsToken(string(run)) {
			return nil, protocol.Refuse(400, fmt.Sprintf("reorder: run %.80q; want the names of runs that wait", run))
		}
	}
	if err := short("reorder", map[string]string{"who": r.Who}); err != nil {
		return nil, err
	}
	return listed(h.keeper.Reorder(h.ctx, r))
}

// listed writes an empty list as a list.
func listed(reply protocol.QueueReply, err error) (any, error) {
	if err != nil {
		return nil, err
	}
	if reply.Queue == nil {
		reply.Queue = []protocol.QueuedRun{}
	}
	return reply, nil
}

func (h *handlers) status(data []byte) (any, error) {
	if len(data) > 0 {
		if _, err := decode[struct{}](data, maxSmall); err != nil {
			return nil, err
		}
	}
	return whole(h.keeper.Status(h.ctx)), nil
}

// whole writes empty lists as lists.
func whole(s protocol.Status) protocol.Status {
	if s.Causes == nil {
		s.Causes = []protocol.Cause{}
	}
	if s.Queue == nil {
		s.Queue = []protocol.RunID{}
	}
	if s.Waiting == nil {
		s.Waiting = []protocol.WaitingRun{}
	}
	return s
}

func notYet([]byte) (any, error) {
	return nil, protocol.Refuse(501, "not available yet")
}

// inTime is asked when a request's turn has come, not when it arrived: its sender may have given
// up while it waited.
func inTime(expiry *protocol.Time) error {
	if expiry == nil || expiry.IsZero() {
		return nil
	}
	if late := time.Since(expiry.Time); late >= 0 {
		return protocol.Refuse(408, fmt.Sprintf("expired at %s, %s ago; nothing was done", expiry, unit.Span(late.Round(time.Millisecond))))
	}
	return nil
}

var version = regexp.MustCompile(`^v?([0-9]+\.[0-9]+\.[0-9]+(-[0-9A-Za-z.-]+)?(\+[0-9A-Za-z.-]+)?)$`)

// semantic gives the form that the service's own version must have; the metadata has the real one.
func semantic(v string) string {
	if m := version.FindStringSubmatch(v); m != nil {
		return m[1]
	}
	return "0.0.0"
}
