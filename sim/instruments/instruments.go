// Package instruments holds the virtual instruments of a bench: motion controllers, a gated
// counter, shutters, monitors and settings. Each speaks real wire bytes, written from the open
// standard and from nothing else, and all of them share one World, in which every axis has a
// true angle and every gate true counts. The Ledger records what truly happened.
//
// It promises that an instrument's state is a function of time, worked out when somebody asks;
// that the same seed, questions and instants give the same night, byte for byte; and that every
// instant at which an instrument does something by itself is its own (see instant). It starts no
// goroutines and keeps no timers: Serve blocks, and the caller owns the goroutine. It shares
// nothing with the drivers: both are written from the standards and meet on the wire.
//
// All times in the ledger are bench times: the world's beginning, plus the time that passed
// since then multiplied by the pace.
package instruments

import (
	"context"
	"errors"
	"io"
	"time"
)

// Instrument is one virtual device.
type Instrument interface {
	// Name is the device's name in the bench file.
	Name() string
	// Serve answers on one connection until it ends, and returns nil; until ctx ends, and returns
	// its cause; or until the plug is pulled, and returns ErrUnplugged with the connection closed.
	// The instrument's state outlives the connection. One connection at a time.
	Serve(ctx context.Context, conn Conn) error
	// Plugged is false while a trouble has the device's plug pulled: its line cannot be opened.
	Plugged() bool
}

// Conn is the instrument's end of a line: an *End, a pseudo-terminal's master, a TCP connection.
type Conn interface {
	io.ReadWriteCloser
	SetReadDeadline(t time.Time) error
}

// ErrUnplugged is returned by Serve while the device's plug is pulled. It comes at once if the
// plug is pulled already: present the device again after a while.
var ErrUnplugged = errors.New("unplugged")

// Identity is what an instrument says it is: the four fields of IEEE 488.2, 10.14. Empty serial
// or firmware is printed as 0.
type Identity struct {
	Maker, Model, Serial, Firmware string
}

func (i Identity) String() string {
	or0 := func(s string) string {
		if s == "" {
			return "0"
		}
		return s
	}
	return or0(i.Maker) + "," + or0(i.Model) + "," + or0(i.Serial) + "," + or0(i.Firmware)
}
