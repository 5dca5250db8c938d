//go:build !linux

package bench

import (
	"context"
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"strings"
)

// terminal stands in for a pseudo-terminal where this program knows none: a TCP listener on the
// loopback, and a file instead of a link that holds its address.
type terminal struct {
	link   string
	listen net.Listener
	conn   net.Conn
}

func openTerminal(link string) (*terminal, error) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		return nil, err
	}
	t := &terminal{link: link, listen: l}
	if err := os.MkdirAll(filepath.Dir(link), 0o755); err != nil {
		return nil, errors.Join(err, l.Close())
	}
	if err := os.WriteFile(link, []byte(t.address()+"\n"), 0o644); err != nil {
		return nil, errors.Join(err, l.Close())
	}
	return t, nil
}

func (t *terminal) accept(ctx context.Context) (net.Conn, error) {
	stop := context.AfterFunc(ctx, func() { _ = t.listen.Close() })
	defer stop()
	conn, err := t.listen.Accept()
	if ctx.Err() != nil {
		return nil, context.Cause(ctx)
	}
	t.conn = conn
	return conn, err
}

func (t *terminal) renew() error {
	if t.conn != nil {
		_ = t.conn.Close()
	}
	return nil
}

func (t *terminal) unplug() error {
	_ = t.renew()
	err := os.Remove(t.link)
	if errors.Is(err, os.ErrNotExist) {
		err = nil
	}
	if cerr := t.listen.Close(); cerr != nil && !errors.Is(cerr, net.ErrClosed) {
		err = errors.Join(err, cerr)
	}
	return err
}

func (t *terminal) address() string { return "tcp://" + t.listen.Addr().String() }

func linked(folder, name string) (string, error) {
	text, err := os.ReadFile(filepath.Join(folder, name))
	if err != nil {
		return "", err
	}
	address := strings.TrimSpace(string(text))
	if !strings.HasPrefix(address, "tcp://") {
		return "", fmt.Errorf("%s: %q; want the address of an instrument, tcp://host:port", name, address)
	}
	return address, nil
}
