package report

import (
	"encoding/json"
	"fmt"
	"strings"

	"gemel/scan/estimate"
)

// Text is the results for a person, one after the other.
func Text(all []estimate.Result) string {
	var parts []string
	for _, r := range all {
		parts = append(parts, r.Text())
	}
	return strings.Join(parts, "\n"+strings.Repeat("- ", 36)+"\n\n")
}

// Morning is what a person reads of a run: its results, and what happened in its night.
func Morning(all []estimate.Result, night Night) string {
	if len(all) == 0 {
		return night.Text()
	}
	return Text(all) + "\n" + night.Text()
}

// JSON is one object: the first result's keys, and under results the list of all, in the recipe's
// order, the first included. Who asks for one number reads it as ever; who asks for several reads the
// list.
func JSON(all []estimate.Result) ([]byte, error) { return JSONWith(all, nil) }

// JSONWith is JSON with the night under the key night.
func JSONWith(all []estimate.Result, night *Night) ([]byte, error) {
	text, err := json.MarshalIndent(struct {
		estimate.Result
		Results []estimate.Result `json:"results"`
		Night   *Night            `json:"night,omitempty"`
	}{all[0], all, night}, "", "  ")
	if err != nil {
		return nil, fmt.Errorf("results of %s: %w", all[0].Run, err)
	}
	return append(text, '\n'), nil
}

// Objects are the results as the journal keeps them, one object each.
func Objects(all []estimate.Result) ([]json.RawMessage, error) {
	var objects []json.RawMessage
	for _, r := range all {
		text, err := r.JSON()
		if err != nil {
			return nil, err
		}
		objects = append(objects, text)
	}
	return objects, nil
}
