package line

import (
	"context"
	"errors"
)

// ErrLetGo is the cause in errors from a line that was let go for another program.
var ErrLetGo = errors.New("the line was let go for another program; want it taken again")

// Release closes the port and keeps it closed, so that another program may use the instruments on
// it, until Take. It returns when the port is closed: what was being asked has its answer by then.
// Whatever is asked meanwhile fails with remedy GiveUp, a stop included: the instruments are
// somebody else's. Afterwards every device has to connect again. To let go of a line twice is no error.
func (l *Line) Release(ctx context.Context) error {
	l.letGo.Store(true)
	j := &job{ctx: ctx, q: Question{Op: "release"}, release: true, reply: make(chan result, 1)}
	if f := l.hand(l.jobs, j).fault; f != nil {
		l.letGo.Store(false)
		return f
	}
	return nil
}

// Take lets the line be opened again, by the next device that connects. It opens nothing itself.
func (l *Line) Take() { l.letGo.Store(false) }

// release is the owner's part.
func (l *Line) release(*job) result {
	l.lost = ErrLetGo
	l.drop()
	return result{}
}
