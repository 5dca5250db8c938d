package strict

import (
	"fmt"

	"gemel/protocol"
)

// Place is where something stands in a file. It outlives the Doc, so that what is found wrong
// later can still name its line.
type Place struct {
	file      string
	line, col int
	key       string
}

// Finding says what is wrong here.
func (p Place) Finding(found, want string) protocol.Finding {
	return protocol.Finding{File: p.file, Line: p.line, Col: p.col, Key: p.key, Found: found, Want: want}
}

// Key is the path of the key, such as "sweep[1].step".
func (p Place) Key() string { return p.key }

func (p Place) child(name string) Place {
	if p.key != "" {
		name = p.key + "." + name
	}
	p.key = name
	return p
}

func (p Place) item(i int) Place {
	p.key = fmt.Sprintf("%s[%d]", p.key, i)
	return p
}
