package remote

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"reflect"
	"slices"
	"strings"
	"unicode/utf8"

	"gemel/protocol"
)

// Limits of requests. A recipe travels as a JSON string, in which a byte may become two.
const (
	maxSmall  = 64 << 10
	maxRecipe = 1 << 20
	maxStart  = 2*maxRecipe + maxSmall
	maxName   = 200 // bytes of who, key and recipe_name
)

// decode reads one flat JSON object. What the standard decoder lets pass is refused here:
// unknown keys, keys twice, keys in another case, and anything after the object.
func decode[T any](data []byte, limit int) (T, error) {
	var value T
	if len(data) > limit {
		return value, protocol.Refuse(413, fmt.Sprintf("a request of %d bytes; want at most %d", len(data), limit))
	}
	bad := func(format string, v ...any) (T, error) {
		return value, protocol.Refuse(400, "request: "+fmt.Sprintf(format, v...))
	}
	if !utf8.Valid(data) {
		return bad("not UTF-8")
	}
	known := keys(reflect.TypeFor[T]())
	d := json.NewDecoder(bytes.NewReader(data))
	if open, err := d.Token(); err != nil || open != json.Delim('{') {
		return bad("no JSON object; want one such as {}")
	}
	seen := map[string]bool{}
	for d.More() {
		t, err := d.Token()
		if err != nil {
			return bad("%v", err)
		}
		key := t.(string) // the decoder has seen to it
		if !slices.Contains(known, key) {
			return bad("key %.80q; want only %s", key, or(strings.Join(known, ", "), "an empty object"))
		}
		if seen[key] {
			return bad("key %q twice", key)
		}
		seen[key] = true
		var skipped json.RawMessage
		if err := d.Decode(&skipped); err != nil {
			return bad("%s: %v", key, err)
		}
		if bytes.Equal(skipped, []byte("null")) {
			return bad("%s: null; leave the key out", key)
		}
	}
	if _, err := d.Token(); err != nil {
		return bad("%v", err)
	}
	if _, err := d.Token(); err != io.EOF {
		return bad("something follows the object")
	}
	if err := json.Unmarshal(data, &value); err != nil {
		return bad("%v", err)
	}
	return value, nil
}

func keys(t reflect.Type) []string {
	var names []string
	for f := range t.Fields() {
		name, _, _ := strings.Cut(f.Tag.Get("json"), ",")
		names = append(names, name)
	}
	return names
}

func or(text, otherwise string) string {
	if text == "" {
		return otherwise
	}
	return text
}

// short refuses names that are too long to be written down at every turn.
func short(where string, names map[string]string) error {
	for _, key := range []string{"key", "who", "recipe_name"} {
		if len(names[key]) > maxName {
			return protocol.Refuse(400, fmt.Sprintf("%s: %s of %d bytes; want at most %d", where, key, len(names[key]), maxName))
		}
	}
	return nil
}
