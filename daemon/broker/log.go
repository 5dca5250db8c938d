package broker

import (
	"fmt"
	"sync"

	"github.com/nats-io/nats-server/v2/server"
)

// logger passes the server's warnings and errors on. Protocol traces and debug lines are never
// asked for: they could carry what must not be written down.
type logger struct {
	say func(string)

	mu    sync.Mutex
	fatal string
}

var _ server.Logger = (*logger)(nil)

func (l *logger) pass(format string, v ...any) {
	if l.say != nil {
		l.say(fmt.Sprintf(format, v...))
	}
}

func (l *logger) Noticef(string, ...any)         {}
func (l *logger) Debugf(string, ...any)          {}
func (l *logger) Tracef(string, ...any)          {}
func (l *logger) Warnf(format string, v ...any)  { l.pass(format, v...) }
func (l *logger) Errorf(format string, v ...any) { l.pass(format, v...) }

// Fatalf is how the server says that it did not start; it does not end anything.
func (l *logger) Fatalf(format string, v ...any) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.fatal = fmt.Sprintf(format, v...)
}

func (l *logger) died() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.fatal
}
