package client

import (
	"context"

	"gemel/protocol"
)

// Hand asks for one act of hand work and waits until it is done, which a move or a search for a
// zero may make a while: ctx bounds it. A request to rest, to leave or to close may be late; every
// other expires like Start unless it brings an expiry.
func (c *Client) Hand(ctx context.Context, r protocol.HandRequest) (protocol.HandReply, error) {
	safe := r.Act == protocol.HandRest || r.Act == protocol.HandLeave || r.Act == protocol.HandShutter && r.Open != nil && !*r.Open
	if !safe {
		r.ExpiresAt = expiry(ctx, r.ExpiresAt)
	}
	return ask[protocol.HandReply](ctx, c, "hand", r)
}
