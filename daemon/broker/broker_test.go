package broker

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"go.uber.org/goleak"

	"gemel/protocol"
	"gemel/protocol/client"
)

const bench = "skerry"

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// lines collects what the broker logs.
type lines struct {
	mu   sync.Mutex
	text []string
}

func (l *lines) add(s string) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.text = append(l.text, s)
}

func (l *lines) String() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return strings.Join(l.text, "\n")
}

// run starts a broker and returns how to end it, which also happens at the end of the test.
func run(t *testing.T, b *Broker) (stop func()) {
	t.Helper()
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- b.Run(ctx) }()
	select {
	case <-b.Ready():
	case err := <-done:
		t.Fatalf("Run: %v", err)
	}
	stop = sync.OnceFunc(func() {
		cancel()
		if err := <-done; err != nil {
			t.Errorf("Run ended with %v; want nil when it was told to end", err)
		}
	})
	t.Cleanup(stop)
	return stop
}

func begin(t *testing.T, dir string) *Broker {
	t.Helper()
	b, err := New(Config{Bench: bench, Dir: dir})
	if err != nil {
		t.Fatal(err)
	}
	run(t, b)
	return b
}

func ended(t *testing.T, nc *nats.Conn) *nats.Conn {
	t.Helper()
	t.Cleanup(func() { closeConn(nc) })
	return nc
}

func closeConn(nc *nats.Conn) {
	closed := nc.StatusChanged(nats.CLOSED)
	if nc.Drain() != nil {
		nc.Close()
	}
	for !nc.IsClosed() {
		<-closed
	}
}

func daemonConn(t *testing.T, b *Broker) *nats.Conn {
	t.Helper()
	nc, err := b.Connect("test")
	if err != nil {
		t.Fatal(err)
	}
	return ended(t, nc)
}

// roleConn connects as an outside client does: over TCP, with a seed file. Refusals arrive on
// the channel.
func roleConn(t *testing.T, dir, role string, more ...nats.Option) (*nats.Conn, chan error) {
	t.Helper()
	o, err := client.FromFolder(dir, role)
	if err != nil {
		t.Fatal(err)
	}
	refused := make(chan error, 100)
	more = append(more, nats.ErrorHandler(func(_ *nats.Conn, _ *nats.Subscription, err error) { refused <- err }))
	nc, err := o.Dial(more...)
	if err != nil {
		t.Fatal(err)
	}
	return ended(t, nc), refused
}

func makeStream(t *testing.T, nc *nats.Conn) jetstream.Stream {
	t.Helper()
	js, err := jetstream.New(nc)
	if err != nil {
		t.Fatal(err)
	}
	s, err := js.CreateStream(t.Context(), jetstream.StreamConfig{
		Name: protocol.Stream(bench), Subjects: protocol.StreamSubjects(bench), MaxBytes: 1 << 20,
	})
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// settle returns the refusal that the broker sent for what was done before, nil for none: the
// answer to a ping comes after it, and the client hands errors on in order.
func settle(t *testing.T, nc *nats.Conn, refused chan error) error {
	t.Helper()
	if err := nc.Flush(); err != nil {
		t.Fatal(err)
	}
	select {
	case err := <-refused:
		return err
	default:
	}
	// The error handler runs on a goroutine of the client's own; LastError is set before the
	// ping's answer is read.
	if errors.Is(nc.LastError(), nats.ErrPermissionViolation) {
		return <-refused
	}
	return nil
}

func TestPermissionsHold(t *testing.T) {
	dir := t.TempDir()
	b := begin(t, dir)
	makeStream(t, daemonConn(t, b))
	s := "GEMEL_skerry"
	const both, controlOnly, none = "control watch", "control", ""
	publish := []struct{ subject, allowed string }{
		{"gemel.skerry.do.status", both},
		{"gemel.skerry.do.start", controlOnly},
		{"gemel.skerry.do.stop", controlOnly},
		{"gemel.skerry.do.hold", controlOnly},
		{"gemel.skerry.do.resume", controlOnly},
		{"gemel.skerry.do.queue", both},
		{"gemel.skerry.do.reorder", controlOnly},
		{"gemel.skerry.do.withdraw", controlOnly},
		{"gemel.skerry.do.stop_after_point", controlOnly},
		{"gemel.skerry.do.forecast", controlOnly},
		{"gemel.skerry.do.start.more", none},
		{"gemel.other.do.status", none},
		{"gemel.skerry.reading.r1", none},
		{"gemel.skerry.point.r1", none},
		{"gemel.skerry.event.r1", none},
		{"gemel.skerry.result.r1", none},
		{"gemel.skerry.beat", none},
		{"_INBOX.somebody.1", none},
		{"_INBOX_watch.somebody.1", none},
		{"_INBOX_daemon.somebody.1", none},
		{"$JS.API.STREAM.INFO." + s, both},
		{"$JS.API.STREAM.MSG.GET." + s, both},
		{"$JS.API.CONSUMER.CREATE." + s + ".c1", both},
		{"$JS.API.CONSUMER.CREATE." + s + ".c1.gemel.skerry.reading.*", both},
		{"$JS.API.CONSUMER.INFO." + s + ".c1", both},
		{"$JS.API.CONSUMER.MSG.NEXT." + s + ".c1", both},
		{"$JS.ACK." + s + ".c1.1.1.1.1.0", both},
		{"$JS.API.CONSUMER.DELETE." + s + ".c1", none},
		{"$JS.API.CONSUMER.PAUSE." + s + ".c1", none},
		{"$JS.API.CONSUMER.DURABLE.CREATE." + s + ".c1", none},
		{"$JS.API.STREAM.CREATE." + s, none},
		{"$JS.API.STREAM.UPDATE." + s, none},
		{"$JS.API.STREAM.DELETE." + s, none},
		{"$JS.API.STREAM.PURGE." + s, none},
		{"$JS.API.STREAM.MSG.DELETE." + s, none},
		{"$JS.API.STREAM.SNAPSHOT." + s, none},
		{"$JS.API.STREAM.RESTORE." + s, none},
		{"$JS.API.STREAM.INFO.OTHER", none},
		{"$JS.API.CONSUMER.CREATE.OTHER.c1", none},
		{"$SRV.PING", both},
		{"$SRV.INFO.gemel", both},
		{"$SYS.REQ.SERVER.PING", none},
	}
	subscribe := []struct{ subject, allowed string }{
		{"gemel.skerry.beat", both},
		{"_INBOX_watch.mine", "watch"},
		{"_INBOX_watch.>", "watch"},
		{"_INBOX.mine", controlOnly},
		{"_INBOX.>", controlOnly},
		{"_INBOX_daemon.>", none},
		{"_INBOX*.>", none},
		{"gemel.skerry.do.start", none},
		{"gemel.skerry.do.*", none},
		{"gemel.skerry.reading.*", none}, // the stream is the way: it has no gaps
		{"gemel.>", none},
		{">", none},
		{"$JS.API.>", none},
		{"$SRV.>", none},
	}
	for _, role := range []string{protocol.ControlRole, protocol.WatchRole} {
		for _, c := range publish {
			t.Run(role+" publishing on "+c.subject, func(t *testing.T) {
				nc, refused := roleConn(t, dir, role)
				if err := nc.Publish(c.subject, []byte("{}")); err != nil {
					t.Fatal(err)
				}
				judge(t, strings.Contains(c.allowed, role), settle(t, nc, refused))
			})
		}
		for _, c := range subscribe {
			t.Run(role+" subscribing to "+c.subject, func(t *testing.T) {
				nc, refused := roleConn(t, dir, role)
				if _, err := nc.SubscribeSync(c.subject); err != nil {
					t.Fatal(err)
				}
				judge(t, strings.Contains(c.allowed, role), settle(t, nc, refused))
			})
		}
	}
}

func judge(t *testing.T, allowed bool, err error) {
	t.Helper()
	switch {
	case allowed && err != nil:
		t.Errorf("refused: %v; want it allowed", err)
	case !allowed && err == nil:
		t.Error("allowed; want it refused")
	case !allowed && !errors.Is(err, nats.ErrPermissionViolation):
		t.Errorf("refused by %v; want a permission violation", err)
	}
}

func TestAWatcherReadsTheStreamAndCannotDeleteAnothersConsumer(t *testing.T) {
	dir := t.TempDir()
	b := begin(t, dir)
	daemon := daemonConn(t, b)
	stream := makeStream(t, daemon)
	for i := range 3 {
		if err := daemon.Publish("gemel.skerry.event.r1", fmt.Append(nil, i)); err != nil {
			t.Fatal(err)
		}
	}
	theirs, err := stream.CreateConsumer(t.Context(), jetstream.ConsumerConfig{Durable: "theirs", AckPolicy: jetstream.AckExplicitPolicy})
	if err != nil {
		t.Fatal(err)
	}

	watch, _ := roleConn(t, dir, protocol.WatchRole)
	js, err := jetstream.New(watch)
	if err != nil {
		t.Fatal(err)
	}
	c, err := js.CreateConsumer(t.Context(), protocol.Stream(bench), jetstream.ConsumerConfig{AckPolicy: jetstream.AckExplicitPolicy})
	if err != nil {
		t.Fatalf("a watcher's own consumer: %v", err)
	}
	for i := range 3 {
		m, err := c.Next()
		if err != nil || string(m.Data()) != fmt.Sprint(i) {
			t.Fatalf("message %d: %v, %v", i, m, err)
		}
		if err := m.DoubleAck(t.Context()); err != nil {
			t.Errorf("acknowledging message %d: %v", i, err)
		}
	}
	ctx, cancel := context.WithTimeout(t.Context(), 200*time.Millisecond)
	defer cancel()
	if err := js.DeleteConsumer(ctx, protocol.Stream(bench), "theirs"); err == nil {
		t.Error("a watcher deleted another reader's consumer")
	}
	if _, err := theirs.Info(t.Context()); err != nil {
		t.Errorf("the other reader's consumer: %v; want it alive", err)
	}
}

// A consumer that pushes publishes in the name of the server, past the permissions of who made
// it. What a watcher can do with one must not be more than noise.
func TestAPushConsumerIsNoWayAroundThePermissions(t *testing.T) {
	dir := t.TempDir()
	b := begin(t, dir)
	daemon := daemonConn(t, b)
	stream := makeStream(t, daemon)
	watch, _ := roleConn(t, dir, protocol.WatchRole)
	js, err := jetstream.New(watch)
	if err != nil {
		t.Fatal(err)
	}
	push := func(target string) (string, error) {
		c, err := js.CreatePushConsumer(t.Context(), "GEMEL_skerry", jetstream.ConsumerConfig{
			DeliverSubject: target, HeadersOnly: true, AckPolicy: jetstream.AckNonePolicy,
		})
		if err != nil {
			return "", err
		}
		return c.CachedInfo().Name, nil
	}
	var pushing []string
	for _, target := range []string{
		"$JS.API.STREAM.DELETE.GEMEL_skerry", "$JS.API.STREAM.PURGE.GEMEL_skerry", "$JS.API.CONSUMER.DELETE.GEMEL_skerry.theirs",
	} {
		name, err := push(target)
		if err != nil {
			continue // refused is as good
		}
		pushing = append(pushing, name)
	}
	for _, target := range []string{"gemel.skerry.event.forged", "gemel.skerry.reading.forged"} {
		if _, err := push(target); err == nil {
			t.Errorf("a consumer that pushes to %s was made; want it refused", target)
		}
	}
	theirs, err := stream.CreateConsumer(t.Context(), jetstream.ConsumerConfig{Durable: "theirs"})
	if err != nil {
		t.Fatal(err)
	}
	own, err := jetstream.New(daemon)
	if err != nil {
		t.Fatal(err)
	}
	for range 5 {
		if _, err := own.Publish(t.Context(), "gemel.skerry.event.r1", nil); err != nil {
			t.Fatal(err)
		}
	}
	for range 5 {
		m, err := theirs.Next()
		if err != nil {
			t.Fatalf("the other reader: %v", err)
		}
		if err := m.DoubleAck(t.Context()); err != nil {
			t.Fatal(err)
		}
	}
	for _, name := range pushing {
		c, err := stream.PushConsumer(t.Context(), name)
		if err != nil {
			t.Fatal(err)
		}
		if n := c.CachedInfo().Delivered.Consumer; n != 0 {
			t.Errorf("%d messages pushed to %s; want none", n, c.CachedInfo().Config.DeliverSubject)
		}
	}
	info, err := stream.Info(t.Context())
	if err != nil {
		t.Fatalf("the stream: %v; want it alive", err)
	}
	if info.State.Msgs != 5 {
		t.Errorf("the stream holds %d messages; want 5", info.State.Msgs)
	}
	if _, err := theirs.Info(t.Context()); err != nil {
		t.Errorf("the other reader's consumer: %v; want it alive", err)
	}
}

func TestNobodyComesInWithoutACredential(t *testing.T) {
	dir := t.TempDir()
	b := begin(t, dir)
	for name, opts := range map[string][]nats.Option{
		"without any":           nil,
		"with a password":       {nats.UserInfo("control", "control")},
		"with a stranger's key": {strangersKey(t)},
	} {
		if nc, err := nats.Connect(b.Contact().URL, opts...); !errors.Is(err, nats.ErrAuthorization) {
			t.Errorf("%s: %v; want an authorization error", name, err)
			if nc != nil {
				nc.Close()
			}
		}
	}
}

func strangersKey(t *testing.T) nats.Option {
	t.Helper()
	file := filepath.Join(t.TempDir(), "stranger.nk")
	if _, err := keep(file); err != nil {
		t.Fatal(err)
	}
	o, err := nats.NkeyOptionFromSeed(file)
	if err != nil {
		t.Fatal(err)
	}
	return o
}

func TestCredentialFilesAreMadeOnceAndReadableByTheirOwnerOnly(t *testing.T) {
	dir := t.TempDir()
	read := func() (all string) {
		for _, name := range []string{"control.nk", "watch.nk"} {
			info, err := os.Stat(filepath.Join(dir, name))
			if err != nil {
				t.Fatal(err)
			}
			if info.Mode().Perm() != 0o600 {
				t.Errorf("%s has mode %v; want 0600", name, info.Mode().Perm())
			}
			text, err := os.ReadFile(filepath.Join(dir, name))
			if err != nil {
				t.Fatal(err)
			}
			if !strings.HasPrefix(string(text), "SU") {
				t.Errorf("%s does not begin like a user's seed", name)
			}
			all += string(text)
		}
		return all
	}
	if _, err := New(Config{Bench: bench, Dir: dir}); err != nil {
		t.Fatal(err)
	}
	first := read()
	if _, err := New(Config{Bench: bench, Dir: dir}); err != nil {
		t.Fatal(err)
	}
	if read() != first {
		t.Error("the second start made other credentials; want the first ones kept")
	}
	left, err := filepath.Glob(filepath.Join(dir, ".*"))
	if err != nil || len(left) > 0 {
		t.Errorf("left behind: %v, %v", left, err)
	}
}

func TestBadCredentialFilesAreRefusedWithoutQuotingThem(t *testing.T) {
	cases := []struct {
		name, text string
		mode       os.FileMode
		want       string
	}{
		{"an empty file", "", 0o600, "control.nk: holds no seed"},
		{"a damaged seed", "SUAGC3DPGCVIQ27LH5QWDS2ISFKMFQOZSECRETSECRETSECRETSECRETXY\n", 0o600, "control.nk: holds no seed"},
		{"something else", "password: SECRET\n", 0o600, "control.nk: holds no seed"},
		{"a file that everybody may read", "SU", 0o644, "control.nk: mode 0644 lets everybody use it; want 0600"},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			dir := t.TempDir()
			file := filepath.Join(dir, "control.nk")
			if err := os.WriteFile(file, []byte(c.text), c.mode); err != nil {
				t.Fatal(err)
			}
			_, err := New(Config{Bench: bench, Dir: dir})
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("error %v; want %q in it", err, c.want)
			}
			if err != nil && strings.Contains(err.Error(), "SECRET") {
				t.Errorf("error %v quotes the file", err)
			}
		})
	}
}

func TestTheContactFileIsThereWhileTheDaemonRuns(t *testing.T) {
	dir := t.TempDir()
	if _, err := client.ReadContact(dir); !errors.Is(err, client.ErrNotRunning) {
		t.Errorf("before: %v; want ErrNotRunning", err)
	}
	b, err := New(Config{Bench: bench, Dir: dir})
	if err != nil {
		t.Fatal(err)
	}
	stop := run(t, b)
	got, err := client.ReadContact(dir)
	if err != nil || got != b.Contact() {
		t.Errorf("contact %+v, %v; want %+v", got, err, b.Contact())
	}
	var keys map[string]string
	text, err := os.ReadFile(filepath.Join(dir, "contact.json"))
	if err == nil {
		err = json.Unmarshal(text, &keys)
	}
	if err != nil || len(keys) != 4 || keys["bench"] != bench || !strings.HasPrefix(keys["url"], "nats://127.0.0.1:") ||
		keys["control"] != filepath.Join(dir, "control.nk") || keys["watch"] != filepath.Join(dir, "watch.nk") {
		t.Errorf("contact file %s, %v", text, err)
	}
	stop()
	if _, err := client.ReadContact(dir); !errors.Is(err, client.ErrNotRunning) {
		t.Errorf("after: %v; want ErrNotRunning", err)
	}
}

func TestAKilledDaemonsSuccessorListensWhereItDid(t *testing.T) {
	dir := t.TempDir()
	b, err := New(Config{Bench: bench, Dir: dir})
	if err != nil {
		t.Fatal(err)
	}
	stop := run(t, b)
	url := b.Contact().URL
	text, err := os.ReadFile(filepath.Join(dir, "contact.json"))
	if err != nil {
		t.Fatal(err)
	}
	stop()
	if err := os.WriteFile(filepath.Join(dir, "contact.json"), text, 0o600); err != nil { // as if it had been killed
		t.Fatal(err)
	}
	if _, err := client.ConnectFolder(dir, protocol.ControlRole); !errors.Is(err, client.ErrGone) {
		t.Errorf("a command finds %v; want ErrGone", err)
	}
	if got := begin(t, dir).Contact().URL; got != url {
		t.Errorf("the successor listens at %s; want %s", got, url)
	}
}

func TestWhereItListens(t *testing.T) {
	busy, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer busy.Close()
	for _, c := range []struct{ listen, want string }{
		{busy.Addr().String(), "address already in use"},
		{"4222", "want HOST:PORT"},
		{"127.0.0.1:many", "want a port from 0 to 65535"},
		{"127.0.0.1:70000", "want a port from 0 to 65535"},
	} {
		if _, err := New(Config{Bench: bench, Dir: t.TempDir(), Listen: c.listen}); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("listening on %q: %v; want %q in it", c.listen, err, c.want)
		}
	}
	for _, c := range []struct{ listen, bound, told string }{
		{"", "127.0.0.1", "nats://127.0.0.1:"},
		{":0", "127.0.0.1", "nats://127.0.0.1:"},
		{"127.0.0.1:0", "127.0.0.1", "nats://127.0.0.1:"},
		{"0.0.0.0:0", "0.0.0.0", "nats://127.0.0.1:"}, // only because it was asked for
	} {
		b, err := New(Config{Bench: bench, Dir: t.TempDir(), Listen: c.listen})
		if err != nil {
			t.Fatal(err)
		}
		stop := run(t, b)
		ip := b.server().Addr().(*net.TCPAddr).IP
		if want := net.ParseIP(c.bound); !ip.Equal(want) && !(want.IsUnspecified() && ip.IsUnspecified()) {
			t.Errorf("listening on %q: bound to %v; want %v", c.listen, ip, want)
		}
		if !strings.HasPrefix(b.Contact().URL, c.told) {
			t.Errorf("listening on %q: told %s; want %s…", c.listen, b.Contact().URL, c.told)
		}
		stop()
	}
}

func TestItStoresInTheDataFolderAndSyncsEveryWrite(t *testing.T) {
	dir := t.TempDir()
	b := begin(t, dir)
	c := b.server().JetStreamConfig()
	if !c.SyncAlways || c.StoreDir != filepath.Join(dir, "nats", "jetstream") || c.MaxStore != 4<<30 || c.MaxMemory != 64<<20 {
		t.Errorf("JetStream runs with %+v", c)
	}
}

func TestASecondServerOnTheSameFolderIsRefused(t *testing.T) {
	dir := t.TempDir()
	begin(t, dir)
	b, err := New(Config{Bench: bench, Dir: dir})
	if err != nil {
		t.Fatal(err)
	}
	if err := b.Run(t.Context()); err == nil || !strings.Contains(err.Error(), "another process serves this folder") {
		t.Errorf("a second server: %v; want it refused", err)
	}
	if _, err := client.ReadContact(dir); err != nil {
		t.Errorf("the first one's contact file: %v; want it untouched", err)
	}
}

func TestAServerThatCannotStoreSaysSo(t *testing.T) {
	dir := t.TempDir()
	if err := os.MkdirAll(filepath.Join(dir, "nats"), 0o700); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "nats", "jetstream"), []byte("in the way"), 0o600); err != nil {
		t.Fatal(err)
	}
	b, err := New(Config{Bench: bench, Dir: dir})
	if err != nil {
		t.Fatal(err)
	}
	if err := b.Run(t.Context()); err == nil || !strings.Contains(err.Error(), "not a directory") {
		t.Errorf("Run: %v; want what is in the way", err)
	}
}

// A full disk itself is played in full_linux_test.go; here it is that connections live on.
func TestAServerThatTakesNoWritesIsReplacedUnderItsConnections(t *testing.T) {
	dir := t.TempDir()
	log := &lines{}
	b, err := New(Config{Bench: bench, Dir: dir, Log: log.add})
	if err != nil {
		t.Fatal(err)
	}
	var sick atomic.Pointer[server.Server]
	b.every = time.Millisecond
	b.health = func(srv *server.Server) error {
		if srv == sick.Load() {
			return errors.New("write error: no space left on device")
		}
		return nil
	}
	run(t, b)
	reconnected := make(chan struct{}, 10)
	daemon, err := b.Connect("test", nats.ReconnectHandler(func(*nats.Conn) { reconnected <- struct{}{} }))
	if err != nil {
		t.Fatal(err)
	}
	ended(t, daemon)
	outside := make(chan struct{}, 10)
	watch, _ := roleConn(t, dir, protocol.WatchRole, nats.ReconnectHandler(func(*nats.Conn) { outside <- struct{}{} }))
	stream := makeStream(t, daemon)
	js, err := jetstream.New(daemon)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := js.Publish(t.Context(), "gemel.skerry.event.r1", []byte("before")); err != nil {
		t.Fatal(err)
	}
	first := b.server()
	url := b.Contact().URL
	sick.Store(first)
	<-reconnected
	<-outside
	if err := healthy(b.server()); err != nil {
		t.Errorf("the new server is %v; want it well", err)
	}
	if b.server() == first || b.Contact().URL != url {
		t.Errorf("now at %s; want another server at %s", b.Contact().URL, url)
	}
	if _, err := js.Publish(t.Context(), "gemel.skerry.event.r1", []byte("after")); err != nil {
		t.Errorf("publishing afterwards: %v", err)
	}
	info, err := stream.Info(t.Context())
	if err != nil || info.State.Msgs != 2 {
		t.Errorf("the stream has %+v, %v; want both messages", info, err)
	}
	if err := watch.Flush(); err != nil {
		t.Errorf("the outside connection: %v", err)
	}
	if !strings.Contains(log.String(), "no space left on device") {
		t.Errorf("logged %q; want the reason", log)
	}
}

func TestALineOfTheLogHoldsNoSeed(t *testing.T) {
	dir := t.TempDir()
	log := &lines{}
	b, err := New(Config{Bench: bench, Dir: dir, Log: log.add})
	if err != nil {
		t.Fatal(err)
	}
	run(t, b)
	if _, err := nats.Connect(b.Contact().URL, strangersKey(t)); err == nil {
		t.Fatal("a stranger was let in")
	}
	watch, refused := roleConn(t, dir, protocol.WatchRole)
	_ = watch.Publish("gemel.skerry.do.stop", []byte("SECRET BODY"))
	if settle(t, watch, refused) == nil {
		t.Fatal("nothing was refused")
	}
	text := log.String()
	if !strings.Contains(text, "authentication error") {
		t.Errorf("logged %q; want at least the stranger", text)
	}
	for _, name := range []string{"control.nk", "watch.nk"} {
		seed, err := os.ReadFile(filepath.Join(dir, name))
		if err != nil {
			t.Fatal(err)
		}
		if strings.Contains(text, strings.TrimSpace(string(seed))) {
			t.Errorf("the log holds the seed of %s", name)
		}
	}
	if strings.Contains(text, "SECRET BODY") {
		t.Error("the log holds a message's body")
	}
}

func TestAnOutsideServerIsReachedByTheSameCode(t *testing.T) {
	far := t.TempDir()
	server := begin(t, far)
	dir := t.TempDir()
	b, err := New(Config{Bench: bench, Dir: dir, URL: server.Contact().URL, Creds: filepath.Join(far, "control.nk")})
	if err != nil {
		t.Fatal(err)
	}
	run(t, b)
	nc := daemonConn(t, b)
	if err := nc.Flush(); err != nil {
		t.Errorf("talking to it: %v", err)
	}
	if c, err := client.ReadContact(dir); err != nil || c.URL != server.Contact().URL {
		t.Errorf("contact %+v, %v; want the outside server", c, err)
	}
	if _, err := os.Stat(filepath.Join(dir, "nats")); !os.IsNotExist(err) {
		t.Errorf("a store was made: %v; want none", err)
	}
	if _, err := New(Config{Bench: bench, Dir: dir, URL: "nats://far", Listen: "127.0.0.1:0"}); err == nil {
		t.Error("an outside server and one of our own: accepted; want it refused")
	}
}
