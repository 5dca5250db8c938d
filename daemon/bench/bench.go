// Package bench reads the bench file and builds what it describes. It is the one place where
// drivers and virtual instruments meet.
//
// It promises that a file with anything wrong in it builds nothing and moves nothing, and that all
// findings come at once, each with its line; that a line is either real or simulated, and a bench
// too; and that what a key says is acted on. It refuses keys that no code acts on yet by name,
// pulsed pumps and detectors gated by heralds, axes whose controller only counts its steps (a slip
// would not show), and two axes where a controller can tell only one.
package bench

import (
	"encoding/json"

	"gemel/protocol/strict"
)

// Load reads a bench file.
func Load(path string) (*File, error) {
	text, err := strict.ReadFile(path)
	if err != nil {
		return nil, err
	}
	return Parse(path, text)
}

// Parse reads the text of a bench file. Relative paths in it start at the folder of path. The error
// is a *strict.Error with all findings.
func Parse(path string, text []byte) (*File, error) {
	r := reader{doc: strict.Parse(path, text), file: &File{Path: path, Text: string(text), outlook: &outlook{}}}
	r.read()
	if err := r.doc.Err(); err != nil {
		return nil, err
	}
	return r.file, nil
}

// Schema is the JSON Schema of bench files, made of the reader that Parse uses.
func Schema() (json.RawMessage, error) {
	return strict.Describe("gemel bench", func(doc *strict.Doc) {
		r := reader{doc: doc, file: &File{outlook: &outlook{}}}
		r.read()
	})
}

// reader fills a File from a document.
type reader struct {
	doc  *strict.Doc
	file *File
}

func (r *reader) read() {
	m := r.doc.Root()
	r.bench(m.Need("bench"))
	r.lines(m.Need("lines"))
	r.simulation(m.Opt("simulation"))
	r.controllers(m.Opt("controllers"))
	r.axes(m.Opt("axes"))
	r.counters(m.Need("counters"))
	r.detectors(m.Opt("detectors"))
	r.shutters(m.Opt("shutter"), m.Opt("protectors"))
	r.sensors(m.Opt("sensors"))
	r.settings(m.Opt("settings"))
	r.optics(m.Opt("optics"), m.Opt("arms"))
	r.keepOuts(m.Opt("keep_out"))
	r.service(m)
	m.Later("page", "guards")
	m.Done()
	if r.doc.Readable() {
		r.check()
	}
}
