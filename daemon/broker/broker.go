// Package broker gives the daemon its NATS: a server of its own inside the process, or an
// outside one by its URL. The server of its own listens on the loopback interface unless told
// otherwise, syncs every write, and knows three identities: the daemon, and the roles control
// and watch whose seed files it makes in the data folder at the first start and keeps. It never
// writes a seed anywhere else, and no log line holds one.
//
// A server that no longer takes writes, as after a full disk, is replaced inside the process;
// connections come back by themselves. What the broker holds is a copy: the logbook has it all.
package broker

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"net"
	"net/url"
	"os"
	"path/filepath"
	"strconv"
	"sync"
	"time"

	"github.com/gofrs/flock"
	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"

	"gemel/protocol"
	"gemel/protocol/client"
)

// Config says which broker a bench has.
type Config struct {
	Bench string
	Dir   string // data folder; its lock is the caller's business

	// Listen is HOST:PORT for the server inside the process. Empty is a free port on loopback,
	// the one of the last life where that is still free, so that clients find a killed daemon's
	// successor.
	Listen   string
	MaxStore int64 // bytes that JetStream may use, 0 is 4 GiB

	// An outside server: nothing is started here. Whoever runs it gives the roles' permissions.
	URL   string
	Creds string // seed or credentials file of the daemon; clients of this data folder use it too
	CA    string // file with the authorities to trust, "" for the system's

	Log func(string) // gets the server's warnings, may be nil
}

// Waits. A server that comes up broken again is tried ever more rarely.
const (
	startTime   = 10 * time.Second
	healthEvery = 5 * time.Second
	restartMost = time.Minute

	// A stream that is just being made looks unwell for a moment; a write error stays.
	unwellMost = 3
)

// maxPayload admits a recipe of 1 MiB with every second byte escaped, and its envelope.
const maxPayload = 4 << 20

// Broker is made by New.
type Broker struct {
	cfg            Config
	options        server.Options
	control, watch identity
	daemon         identity
	log            *logger
	health         func(*server.Server) error
	every          time.Duration
	ready          chan struct{}

	mu      sync.Mutex
	current *server.Server // nil while there is none
	trouble error
}

// New checks the configuration and makes what is missing in the data folder. It starts nothing.
func New(c Config) (*Broker, error) {
	if !protocol.IsToken(c.Bench) {
		return nil, fmt.Errorf("bench %q; want a name of letters, digits, - and _", c.Bench)
	}
	folder, err := filepath.Abs(c.Dir)
	if err != nil {
		return nil, err
	}
	c.Dir = folder
	b := &Broker{cfg: c, health: healthy, every: healthEvery, ready: make(chan struct{})}
	if c.URL != "" {
		if c.Listen != "" {
			return nil, fmt.Errorf("nats: a server at %s and one that listens on %s; want one of them", c.URL, c.Listen)
		}
		return b, nil
	}
	store := filepath.Join(folder, "nats")
	if err := os.MkdirAll(store, 0o700); err != nil {
		return nil, err
	}
	if b.control, err = keep(filepath.Join(folder, protocol.ControlRole+".nk")); err != nil {
		return nil, err
	}
	if b.watch, err = keep(filepath.Join(folder, protocol.WatchRole+".nk")); err != nil {
		return nil, err
	}
	if b.daemon, err = own(); err != nil {
		return nil, err
	}
	host, port, err := b.address()
	if err != nil {
		return nil, err
	}
	most := c.MaxStore
	if most == 0 {
		most = 4 << 30
	}
	b.options = server.Options{
		ServerName: c.Bench, Host: host, Port: port, NoSigs: true,
		JetStream: true, StoreDir: store, SyncAlways: true, JetStreamMaxMemory: 64 << 20, JetStreamMaxStore: most,
		MaxPayload: maxPayload, MaxConn: 256, WriteDeadline: 5 * time.Second, HTTPHost: "127.0.0.1",
		Nkeys: []*server.NkeyUser{
			{Nkey: b.daemon.public}, // everything: it is us
			{Nkey: b.control.public, Permissions: Permissions(c.Bench, protocol.ControlRole)},
			{Nkey: b.watch.public, Permissions: Permissions(c.Bench, protocol.WatchRole)},
		},
	}
	return b, nil
}

// address is where to listen. A port that was named must be free; the one of the last life is
// only preferred.
func (b *Broker) address() (host string, port int, err error) {
	if b.cfg.Listen == "" {
		return "127.0.0.1", b.lastPort(), nil
	}
	host, text, err := net.SplitHostPort(b.cfg.Listen)
	if err != nil {
		return "", 0, fmt.Errorf("nats: listen on %q; want HOST:PORT", b.cfg.Listen)
	}
	port, err = strconv.Atoi(text)
	if err != nil || port < 0 || port > 65535 {
		return "", 0, fmt.Errorf("nats: listen on %q; want a port from 0 to 65535", b.cfg.Listen)
	}
	if host == "" {
		host = "127.0.0.1" // the server would take it for every interface
	}
	if port == 0 {
		return host, server.RANDOM_PORT, nil
	}
	return host, port, free(host, port)
}

func free(host string, port int) error {
	l, err := net.Listen("tcp", net.JoinHostPort(host, strconv.Itoa(port)))
	if err != nil {
		return fmt.Errorf("nats: %w", err)
	}
	return l.Close()
}

func (b *Broker) lastPort() int {
	last, err := client.ReadContact(b.cfg.Dir)
	if err != nil {
		return server.RANDOM_PORT
	}
	u, err := url.Parse(last.URL)
	if err != nil || u.Hostname() != "127.0.0.1" {
		return server.RANDOM_PORT
	}
	port, err := strconv.Atoi(u.Port())
	if err != nil || port <= 0 || free("127.0.0.1", port) != nil {
		return server.RANDOM_PORT
	}
	return port
}

// Ready is closed when the broker can be reached and the contact file tells where.
func (b *Broker) Ready() <-chan struct{} { return b.ready }

// Trouble says why the broker takes no writes, nil if nothing is wrong.
func (b *Broker) Trouble() error {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.trouble
}

// Contact is what the contact file holds. It is valid once Ready.
func (b *Broker) Contact() protocol.Contact {
	if b.cfg.URL != "" {
		return protocol.Contact{URL: b.cfg.URL, Bench: b.cfg.Bench, Control: b.cfg.Creds, Watch: b.cfg.Creds}
	}
	host := b.options.Host
	if ip := net.ParseIP(host); ip != nil && ip.IsUnspecified() {
		host = "127.0.0.1"
	}
	address := net.JoinHostPort(host, strconv.Itoa(b.options.Port))
	return protocol.Contact{URL: "nats://" + address, Bench: b.cfg.Bench, Control: b.control.file, Watch: b.watch.file}
}

// Run starts the server and keeps it going until ctx ends; then it takes the contact file away,
// ends the server and returns nil. Close the connections first. With an outside server it only
// keeps the contact file.
func (b *Broker) Run(ctx context.Context) error {
	if b.cfg.URL == "" {
		lock := flock.New(filepath.Join(b.options.StoreDir, "lock"))
		held, err := lock.TryLock()
		if err != nil {
			return fmt.Errorf("%s: %w", lock.Path(), err)
		}
		if !held {
			return fmt.Errorf("%s: another process serves this folder", b.options.StoreDir)
		}
		defer lock.Unlock()
		if err := b.start(); err != nil {
			return err
		}
		defer b.stop()
	}
	contact := filepath.Join(b.cfg.Dir, protocol.ContactFile)
	text, err := json.MarshalIndent(b.Contact(), "", "  ")
	if err != nil {
		return err
	}
	if err := write(contact, append(text, '\n'), 0o600); err != nil {
		return err
	}
	close(b.ready)
	if b.cfg.URL == "" {
		b.watchHealth(ctx)
	} else {
		<-ctx.Done()
	}
	return os.Remove(contact)
}

func (b *Broker) watchHealth(ctx context.Context) {
	tick := time.NewTicker(b.every)
	defer tick.Stop()
	unwell := 0
	wait := b.every // from one restart to the next
	var restarted time.Time
	for {
		select {
		case <-ctx.Done():
			return
		case <-tick.C:
		}
		err := b.check()
		b.mu.Lock()
		b.trouble = err
		b.mu.Unlock()
		if err == nil {
			unwell = 0
			if time.Since(restarted) > restartMost {
				wait = b.every
			}
			continue
		}
		if unwell++; unwell < unwellMost || time.Since(restarted) < wait {
			continue
		}
		b.log.pass("broker: %v: starting it again", err)
		b.stop()
		if err := b.start(); err != nil {
			b.log.pass("broker: %v", err)
		}
		unwell, restarted = 0, time.Now()
		wait = min(2*wait, restartMost)
	}
}

func (b *Broker) server() *server.Server {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.current
}

func (b *Broker) check() error {
	srv := b.server()
	if srv == nil {
		return errors.New("not running")
	}
	return b.health(srv)
}

func healthy(srv *server.Server) error {
	h := srv.Healthz(&server.HealthzOptions{})
	if h.StatusCode == 200 {
		return nil
	}
	if h.Error != "" {
		return errors.New(h.Error)
	}
	if len(h.Errors) > 0 {
		return errors.New(h.Errors[0].Error)
	}
	return fmt.Errorf("health %s", h.Status)
}

// start brings a server up. It looks at what Start does not return: the server only logs why
// it cannot listen or store.
func (b *Broker) start() error {
	options := b.options // the server writes into its options
	b.log = &logger{say: b.cfg.Log}
	srv, err := server.NewServer(&options)
	if err != nil {
		return fmt.Errorf("nats: %w", err)
	}
	srv.SetLoggerV2(b.log, false, false, false)
	srv.Start()
	deadline := time.Now().Add(startTime)
	for !srv.ReadyForConnections(20 * time.Millisecond) {
		if b.log.died() != "" || time.Now().After(deadline) {
			srv.Shutdown()
			srv.WaitForShutdown()
			return fmt.Errorf("nats: the server in %s did not start: %s", b.options.StoreDir, or(b.log.died(), "no reason given"))
		}
	}
	if !srv.JetStreamEnabled() {
		srv.Shutdown()
		srv.WaitForShutdown()
		return fmt.Errorf("nats: no storage in %s: %s", b.options.StoreDir, or(b.log.died(), "no reason given"))
	}
	if tcp, ok := srv.Addr().(*net.TCPAddr); ok && b.options.Port == server.RANDOM_PORT {
		b.options.Port = tcp.Port // the next server listens where this one does
	}
	b.mu.Lock()
	b.current = srv
	b.mu.Unlock()
	return nil
}

func or(text, otherwise string) string {
	if text == "" {
		return otherwise
	}
	return text
}

func (b *Broker) stop() {
	b.mu.Lock()
	srv := b.current
	b.current = nil
	b.mu.Unlock()
	if srv != nil {
		srv.Shutdown()
		srv.WaitForShutdown()
	}
}

// InProcessConn is a pipe to the server that there is now.
func (b *Broker) InProcessConn() (net.Conn, error) {
	srv := b.server()
	if srv == nil {
		return nil, errors.New("the broker is not running")
	}
	return srv.InProcessConn()
}

// Connect opens a connection of the daemon itself. It may be called before Ready: the connection
// then comes up when the broker does, and it never gives up: an outside server's operator may
// mend a refusal in the middle of the night. What is published while it is away fails at once.
func (b *Broker) Connect(name string, more ...nats.Option) (*nats.Conn, error) {
	options := append([]nats.Option{nats.Name(name), nats.RetryOnFailedConnect(true), nats.IgnoreAuthErrorAbort()}, more...)
	if b.cfg.URL != "" {
		return client.Options{URL: b.cfg.URL, Creds: b.cfg.Creds, CA: b.cfg.CA, Bench: b.cfg.Bench}.Dial(options...)
	}
	// Without a URL no TLS is tried on the pipe, where it would hang.
	options = append([]nats.Option{
		nats.InProcessServer(b),
		nats.Nkey(b.daemon.public, b.daemon.key.Sign),
	}, options...)
	return client.Options{Inbox: "_INBOX_daemon"}.Dial(options...)
}
