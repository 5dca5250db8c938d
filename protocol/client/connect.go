package client

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"github.com/nats-io/nats.go"

	"gemel/protocol"
)

// ErrNotRunning says that no daemon runs on a data folder: there is no contact file.
var ErrNotRunning = errors.New("no daemon is running here")

// ErrGone says that a daemon ran on a data folder and ended without taking its leave: the
// contact file is there and nobody answers at its address.
var ErrGone = errors.New("the daemon is gone")

// ErrNoDaemon says that the broker is there and no daemon of the bench listens on it.
var ErrNoDaemon = errors.New("no daemon of this bench on this broker")

// ErrForbidden says that the broker does not let this role ask this.
var ErrForbidden = errors.New("these credentials may not ask this")

// Options say where a bench is and who asks.
type Options struct {
	URL   string
	Bench string
	Creds string // an nkey seed file or a credentials file; "" for a server that wants none
	CA    string // a file with the certificate authorities to trust, "" for the system's
	Inbox string // prefix of answer subjects; "" follows the name of the credential file
	Name  string // of the connection, as the broker's operator sees it
}

// ReadContact reads the contact file of a data folder. It fails with ErrNotRunning when there is
// none.
func ReadContact(folder string) (protocol.Contact, error) {
	path := filepath.Join(folder, protocol.ContactFile)
	text, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		return protocol.Contact{}, fmt.Errorf("%s: %w", folder, ErrNotRunning)
	}
	if err != nil {
		return protocol.Contact{}, err
	}
	var c protocol.Contact
	if err := json.Unmarshal(text, &c); err != nil {
		return protocol.Contact{}, fmt.Errorf("%s: %w", path, err)
	}
	if c.URL == "" || !protocol.IsToken(c.Bench) {
		return protocol.Contact{}, fmt.Errorf("%s: url %q, bench %q; want both", path, c.URL, c.Bench)
	}
	for _, file := range []*string{&c.Control, &c.Watch} {
		if *file != "" && !filepath.IsAbs(*file) {
			*file = filepath.Join(folder, *file)
		}
	}
	return c, nil
}

// FromFolder says how to reach the daemon of a data folder in one of the two roles.
func FromFolder(folder, role string) (Options, error) {
	c, err := ReadContact(folder)
	if err != nil {
		return Options{}, err
	}
	o := Options{URL: c.URL, Bench: c.Bench, Creds: c.Control, Inbox: protocol.InboxPrefix(role)}
	if role == protocol.WatchRole {
		o.Creds = c.Watch
	}
	return o, nil
}

// inbox is decided by the name of the credential file where nothing else is said: the names
// are part of the contract.
func (o Options) inbox() string {
	if o.Inbox != "" {
		return o.Inbox
	}
	if filepath.Base(o.Creds) == protocol.WatchRole+".nk" {
		return protocol.InboxPrefix(protocol.WatchRole)
	}
	return protocol.InboxPrefix(protocol.ControlRole)
}

// Dial opens the NATS connection, with more options where the caller has some. Once open it
// reconnects for ever. What is published while it is away fails at once and is not sent later:
// a request that moves something must not be late.
func (o Options) Dial(more ...nats.Option) (*nats.Conn, error) {
	options := []nats.Option{
		nats.Name(o.Name), nats.CustomInboxPrefix(o.inbox()), nats.Timeout(3 * time.Second),
		nats.MaxReconnects(-1), nats.ReconnectWait(250 * time.Millisecond),
		nats.ReconnectJitter(100*time.Millisecond, time.Second), nats.ReconnectBufSize(-1),
		nats.PingInterval(20 * time.Second), nats.MaxPingsOutstanding(3),
		nats.ErrorHandler(func(*nats.Conn, *nats.Subscription, error) {}), // the default prints
	}
	if o.Creds != "" {
		creds, err := credentials(o.Creds)
		if err != nil {
			return nil, err
		}
		options = append(options, creds)
	}
	if o.CA != "" {
		options = append(options, nats.RootCAs(o.CA))
	}
	conn, err := nats.Connect(o.URL, append(options, more...)...)
	if err != nil {
		return nil, fmt.Errorf("nats %q: %w", o.URL, err)
	}
	return conn, nil
}

// credentials tells the two kinds of files apart: a seed, or a token with a seed.
func credentials(file string) (nats.Option, error) {
	text, err := os.ReadFile(file)
	if err != nil {
		return nil, err
	}
	defer clear(text)
	if bytes.Contains(text, []byte("USER JWT")) {
		return nats.UserCredentials(file), nil
	}
	option, err := nats.NkeyOptionFromSeed(file)
	if err != nil {
		return nil, fmt.Errorf("%s: no user seed found; want an nkey seed file or a credentials file", file)
	}
	return option, nil
}
