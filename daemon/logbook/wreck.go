package logbook

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"iter"
	"math"
	"os"
)

// wreck is a logbook file that is read without SQLite, page by page: SQLite stops at the first page
// that is not what it should be, and what lies behind it would be lost. It is written from the
// published description of the file format (sqlite.org/fileformat2.html), and needs neither a sound
// first page nor a sound tree, for a leaf page of a table says by itself which rows it holds.
// Nothing is ever taken out of a logbook, so a page that no tree leads to holds no row that is not true.
type wreck struct {
	file, log io.ReaderAt // log is nil when there is none
	pageSize  int64       // of which all is used: no file of ours has reserved bytes
	pages     int64
	bytes     int64 // of both: no row is longer
	// newer are the places in log of pages that were committed and are not folded into the file yet.
	newer map[int64]int64
	// strays are the places in log of the other pages up to its last commit: older ones, and damaged
	// ones in which rows may still be whole.
	strays []int64
}

// Sizes in bytes, and what a leaf page of a table begins with.
const (
	fileHead  = 100
	logHead   = 32
	frameHead = 24
	tableLeaf = 0x0d
	usualPage = 4096 // of every file that gemel makes
)

// openWrecks opens a file and its write-ahead log for reading: once for the usual page size, and
// once more when its first page names another one.
func openWrecks(file string) (wrecks []*wreck, done func(), err error) {
	f, size, err := openSized(file)
	if err != nil {
		return nil, nil, err
	}
	log, logSize, err := openSized(file + "-wal")
	if errors.Is(err, fs.ErrNotExist) {
		return newWrecks(f, size, nil, 0), func() { f.Close() }, nil
	}
	if err != nil {
		f.Close()
		return nil, nil, err
	}
	return newWrecks(f, size, log, logSize), func() { f.Close(); log.Close() }, nil
}

func openSized(file string) (*os.File, int64, error) {
	f, err := os.Open(file)
	if err != nil {
		return nil, 0, fmt.Errorf("logbook: %w", err)
	}
	info, err := f.Stat()
	if err != nil {
		f.Close()
		return nil, 0, fmt.Errorf("logbook: %w", err)
	}
	return f, info.Size(), nil
}

func newWrecks(file io.ReaderAt, size int64, log io.ReaderAt, logSize int64) []*wreck {
	wrecks := []*wreck{newWreck(file, size, log, logSize, usualPage)}
	head := make([]byte, fileHead)
	_, _ = file.ReadAt(head, 0)
	named := int64(binary.BigEndian.Uint16(head[16:]))
	if named == 1 {
		named = 65536
	}
	if named != usualPage && named >= 512 && named&(named-1) == 0 {
		wrecks = append(wrecks, newWreck(file, size, log, logSize, named))
	}
	return wrecks
}

func newWreck(file io.ReaderAt, size int64, log io.ReaderAt, logSize, pageSize int64) *wreck {
	w := &wreck{file: file, pageSize: pageSize, pages: (size + pageSize - 1) / pageSize, bytes: size + logSize, newer: map[int64]int64{}}
	if log != nil {
		w.log = log
		w.readLog(logSize)
	}
	return w
}

// readLog finds the pages that the log holds. SQLite takes nothing that comes after a frame whose
// checksum does not hold; but each frame can be checked from the checksum that stands in the one
// before it, so that one damaged frame costs one page.
func (w *wreck) readLog(size int64) {
	head := make([]byte, logHead)
	if n, _ := w.log.ReadAt(head, 0); n < logHead {
		return
	}
	var order binary.ByteOrder = binary.LittleEndian
	if binary.BigEndian.Uint32(head) == 0x377f0683 {
		order = binary.BigEndian
	}
	salts := [8]byte(head[16:24])
	before := checksum{binary.BigEndian.Uint32(head[24:]), binary.BigEndian.Uint32(head[28:])}
	headIsSound := checksum{}.over(order, head[:24]) == before

	type image struct{ page, at int64 }
	var whole, pending []image
	var damaged, doubtful []int64
	frame := make([]byte, frameHead+w.pageSize)
	for at := int64(logHead); at+int64(len(frame)) <= size; at += int64(len(frame)) {
		if n, _ := w.log.ReadAt(frame, at); n < len(frame) {
			break
		}
		if at == logHead && !headIsSound {
			salts = [8]byte(frame[8:16])
		}
		says := checksum{binary.BigEndian.Uint32(frame[16:]), binary.BigEndian.Uint32(frame[20:])}
		holds := before.over(order, frame[:8]).over(order, frame[frameHead:]) == says
		before = says
		if [8]byte(frame[8:16]) != salts {
			continue // of an earlier use of the log, and folded long ago
		}
		page := int64(binary.BigEndian.Uint32(frame))
		if !holds || page == 0 {
			doubtful = append(doubtful, at+frameHead)
			continue
		}
		pending = append(pending, image{page, at + frameHead})
		if binary.BigEndian.Uint32(frame[4:]) != 0 { // the last frame of a commit
			whole, damaged = append(whole, pending...), append(damaged, doubtful...)
			pending, doubtful = nil, nil
		}
	}
	w.strays = damaged
	for _, i := range whole {
		if older, ok := w.newer[i.page]; ok {
			w.strays = append(w.strays, older)
		}
		w.newer[i.page] = i.at
		w.pages = max(w.pages, i.page)
	}
}

// checksum is that of write-ahead logs.
type checksum [2]uint32

func (c checksum) over(order binary.ByteOrder, data []byte) checksum {
	for ; len(data) >= 8; data = data[8:] {
		c[0] += order.Uint32(data) + c[1]
		c[1] += order.Uint32(data[4:]) + c[0]
	}
	return c
}

// spot is where a row stands: a cell of a page, in the file or in the log.
type spot struct {
	inLog bool
	at    int64
	cell  int
	stray bool
}

// row is what stands there. Values are nil, int64, float64, []byte (a blob) or string.
type row struct {
	spot   spot
	id     int64
	values []any
}

// rows yields all rows of all tables, those of the newest pages first, and then those of strays.
func (w *wreck) rows() iter.Seq[row] {
	return func(yield func(row) bool) {
		page := make([]byte, w.pageSize)
		for n := int64(1); n <= w.pages; n++ {
			at, inLog := w.newer[n]
			if !inLog {
				at = (n - 1) * w.pageSize
			}
			if !w.rowsOf(page, spot{inLog: inLog, at: at}, yield) {
				return
			}
		}
		for _, at := range w.strays {
			if !w.rowsOf(page, spot{inLog: true, at: at, stray: true}, yield) {
				return
			}
		}
	}
}

func (w *wreck) rowsOf(page []byte, s spot, yield func(row) bool) bool {
	if !w.read(page, s.inLog, s.at) {
		return true
	}
	head := 0
	if !s.inLog && s.at == 0 {
		head = fileHead // the first page holds no rows of ours, and no harm is done by looking
	}
	if page[head] != tableLeaf {
		return true
	}
	cells := min(int(binary.BigEndian.Uint16(page[head+3:])), (len(page)-head-8)/2)
	for s.cell = range cells {
		if r, ok := w.rowAt(page, s); ok && !yield(r) {
			return false
		}
	}
	return true
}

// again reads one row once more.
func (w *wreck) again(s spot) (row, bool) {
	page := make([]byte, w.pageSize)
	if !w.read(page, s.inLog, s.at) {
		return row{}, false
	}
	return w.rowAt(page, s)
}

// read fills a page. What lies behind the end of the file is read as zeros.
func (w *wreck) read(page []byte, inLog bool, at int64) bool {
	from := w.file
	if inLog {
		from = w.log
	}
	n, _ := from.ReadAt(page, at)
	clear(page[n:])
	return n > 0
}

func (w *wreck) rowAt(page []byte, s spot) (row, bool) {
	pointer := 8 + 2*s.cell
	if !s.inLog && s.at == 0 {
		pointer += fileHead
	}
	if pointer+2 > len(page) {
		return row{}, false
	}
	cell := page[min(int(binary.BigEndian.Uint16(page[pointer:])), len(page)):]
	length, n := varint(cell)
	if n == 0 || length < 2 || length > w.bytes {
		return row{}, false
	}
	cell = cell[n:]
	id, n := varint(cell)
	if n == 0 {
		return row{}, false
	}
	payload, ok := w.payload(cell[n:], length)
	if !ok {
		return row{}, false
	}
	values, ok := record(payload)
	return row{s, id, values}, ok
}

// payload puts a row together that does not fit into its page.
func (w *wreck) payload(local []byte, length int64) ([]byte, bool) {
	here := length
	if most := w.pageSize - 35; length > most {
		least := (w.pageSize-12)*32/255 - 23
		if here = least + (length-least)%(w.pageSize-4); here > most {
			here = least
		}
	}
	if here == length {
		if int64(len(local)) < length {
			return nil, false
		}
		return local[:length], true
	}
	if int64(len(local)) < here+4 {
		return nil, false
	}
	payload := append(make([]byte, 0, length), local[:here]...)
	next := int64(binary.BigEndian.Uint32(local[here:]))
	page := make([]byte, w.pageSize)
	for int64(len(payload)) < length {
		if next < 1 || next > w.pages {
			return nil, false
		}
		at, inLog := w.newer[next]
		if !inLog {
			at = (next - 1) * w.pageSize
		}
		if !w.read(page, inLog, at) {
			return nil, false
		}
		payload = append(payload, page[4:min(w.pageSize, 4+length-int64(len(payload)))]...)
		next = int64(binary.BigEndian.Uint32(page))
	}
	return payload, true
}

// mostColumns is more than any table of ours has.
const mostColumns = 32

// record decodes the values of a row.
func record(payload []byte) ([]any, bool) {
	size, n := varint(payload)
	if n == 0 || size < int64(n) || size > int64(len(payload)) {
		return nil, false
	}
	types, data := payload[n:size], payload[size:]
	var values []any
	for len(types) > 0 {
		kind, n := varint(types)
		if n == 0 || kind < 0 || len(values) == mostColumns {
			return nil, false
		}
		types = types[n:]
		value, rest, ok := value(kind, data)
		if !ok {
			return nil, false
		}
		values, data = append(values, value), rest
	}
	return values, true
}

func value(kind int64, data []byte) (value any, rest []byte, ok bool) {
	switch kind {
	case 0:
		return nil, data, true
	case 8, 9:
		return kind - 8, data, true
	case 10, 11:
		return nil, nil, false
	}
	size := int64(8)
	switch {
	case kind >= 12:
		size = (kind - 12) / 2
	case kind <= 4:
		size = kind
	case kind == 5:
		size = 6
	}
	if size > int64(len(data)) {
		return nil, nil, false
	}
	is, rest := data[:size], data[size:]
	switch {
	case kind >= 12 && kind%2 == 1:
		return string(is), rest, true
	case kind >= 12:
		return append([]byte(nil), is...), rest, true
	}
	var whole int64
	if is[0] >= 0x80 {
		whole = -1
	}
	for _, b := range is {
		whole = whole<<8 | int64(b)
	}
	if kind == 7 {
		return math.Float64frombits(uint64(whole)), rest, true
	}
	return whole, rest, true
}

// varint reads a number of 1 to 9 bytes; n is 0 when there is none.
func varint(data []byte) (value int64, n int) {
	for n = range min(9, len(data)) {
		b := data[n]
		if n == 8 {
			return value<<8 | int64(b), 9
		}
		value = value<<7 | int64(b&0x7f)
		if b < 0x80 {
			return value, n + 1
		}
	}
	return 0, 0
}
