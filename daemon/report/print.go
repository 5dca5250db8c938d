package report

import (
	"encoding/json"
	"fmt"
	"strings"

	"gemel/protocol"
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
	text := Text(all)
	for _, r := range all {
		if r.Value == nil && !night.State.Final() {
			text = strings.Replace(text, r.Sentence(), night.notYet(r), 1)
		}
	}
	return text + "\n" + night.Text()
}

// notYet says of a run that goes on why it has no result so far.
func (n Night) notYet(r estimate.Result) string {
	return fmt.Sprintf("No %s from %s yet: the run is %s with %d of %d readings accepted, and what is there is too little for a value; it lacks so far: %s.",
		strings.ReplaceAll(r.Kind, "_", " "), r.Run, n.State, n.Accepted, max(n.Planned, n.Accepted), strings.Join(r.Because, "; "))
}

// NightJSON is what JSONWith prints of a run whose recipe asks for no result: an empty list, and the
// night.
func NightJSON(n Night) ([]byte, error) {
	text, err := json.MarshalIndent(struct {
		Run     protocol.RunID    `json:"run"`
		Results []estimate.Result `json:"results"`
		Night   Night             `json:"night"`
	}{n.run, []estimate.Result{}, n}, "", "  ")
	if err != nil {
		return nil, fmt.Errorf("night of %s: %w", n.run, err)
	}
	return append(text, '\n'), nil
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
