package line

import (
	"bytes"
	"errors"
)

// Frame cuts one answer from the beginning of what came. It returns how many bytes the answer
// has and how many it takes up with its end, 0 if more must come, or an error if nothing that
// may follow can make an answer of it. It must not keep or change b.
type Frame func(b []byte) (payload, size int, err error)

// Terminated cuts at a terminator. If that is "\n", a "\r" before it belongs to it.
func Terminated(end []byte) Frame {
	return func(b []byte) (int, int, error) {
		i := bytes.Index(b, end)
		if i < 0 {
			return 0, 0, nil
		}
		return trimmed(b, end, i), i + len(end), nil
	}
}

func trimmed(b, end []byte, i int) int {
	if i > 0 && len(end) == 1 && end[0] == '\n' && b[i-1] == '\r' {
		return i - 1
	}
	return i
}

// Blocks cuts at a terminator, but not inside a definite block (#<n><length><bytes>, IEEE 488.2,
// where an element of an answer starts) nor inside a string in quotes. An indefinite block ends
// at the terminator, as it can only be the last element.
func Blocks(end []byte) Frame {
	return func(b []byte) (int, int, error) {
		atStart := true
		for i := 0; i < len(b); {
			switch {
			case bytes.HasPrefix(b[i:], end):
				return trimmed(b, end, i), i + len(end), nil
			case b[i] == '#' && atStart:
				n, err := blockSize(b[i:])
				if n == 0 || err != nil {
					return 0, 0, err
				}
				i += n
				atStart = false
			case b[i] == '"' && atStart:
				// A doubled quote closes and opens again, which comes to the same. A string that
				// is not closed before the end was damaged; it must not swallow the next answer.
				j := bytes.IndexByte(b[i+1:], '"')
				e := bytes.Index(b[i+1:], end)
				if e >= 0 && (j < 0 || e < j) {
					return trimmed(b, end, i+1+e), i + 1 + e + len(end), nil
				}
				if j < 0 {
					return 0, 0, nil
				}
				i += j + 2
			default:
				atStart = b[i] == ',' || b[i] == ';' || (atStart && b[i] == ' ')
				i++
			}
		}
		return 0, 0, nil
	}
}

var errBlock = errors.New("a definite block without a valid length")

// blockSize returns the size of the block at the start of b with its header, 0 if more must
// come. An indefinite block counts as its two first bytes.
func blockSize(b []byte) (int, error) {
	if len(b) < 2 {
		return 0, nil
	}
	if b[1] == '0' {
		return 2, nil
	}
	if b[1] < '1' || b[1] > '9' {
		return 1, nil // "#H1F" is a number, not a block
	}
	n, length := int(b[1]-'0'), 0
	for i := 2; i < 2+n; i++ {
		if i >= len(b) {
			return 0, nil
		}
		if b[i] < '0' || b[i] > '9' {
			return 0, errBlock
		}
		length = 10*length + int(b[i]-'0')
	}
	if size := 2 + n + length; size <= len(b) {
		return size, nil
	}
	return 0, nil
}

// Exactly cuts n bytes.
func Exactly(n int) Frame {
	return func(b []byte) (int, int, error) {
		if len(b) < n {
			return 0, 0, nil
		}
		return n, n, nil
	}
}
