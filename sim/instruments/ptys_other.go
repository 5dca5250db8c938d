//go:build !linux

package instruments

import (
	"context"
	"errors"
	"fmt"
	"net"
	"os"
)

// Present offers the instrument on a TCP port of this machine until ctx ends, whose cause it
// returns: there are pseudo-terminals on Linux only. The address is written into the file link,
// and ready, if not nil, is called once with it, as a bench file would say it. While the plug is
// pulled connections are closed at once.
func Present(ctx context.Context, inst Instrument, link string, ready func(address string)) error {
	var config net.ListenConfig
	l, err := config.Listen(ctx, "tcp", "127.0.0.1:0")
	if err != nil {
		return fmt.Errorf("%s: %w", inst.Name(), err)
	}
	defer func() { _ = l.Close() }()
	stop := context.AfterFunc(ctx, func() { _ = l.Close() })
	defer stop()
	address := "tcp://" + l.Addr().String()
	if err := os.WriteFile(link, []byte(address+"\n"), 0o644); err != nil {
		return fmt.Errorf("%s: %w", inst.Name(), err)
	}
	defer func() { _ = os.Remove(link) }()
	if ready != nil {
		ready(address)
	}
	for {
		conn, err := l.Accept()
		if err != nil {
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
			return fmt.Errorf("%s: %w", inst.Name(), err)
		}
		err = inst.Serve(ctx, conn)
		_ = conn.Close()
		if err != nil && !errors.Is(err, ErrUnplugged) {
			return err
		}
	}
}
