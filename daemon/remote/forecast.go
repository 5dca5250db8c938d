package remote

import (
	"context"
	"encoding/json"
	"fmt"

	"gemel/protocol"
)

// Forecaster says what a recipe would do. A Keeper that is one answers the verb "forecast"; nothing
// moves for it, so it works while a run goes on and needs no arming.
type Forecaster interface {
	Forecast(context.Context, protocol.ForecastRequest) (protocol.Forecast, error)
}

// Bounds of a reply: a broker takes messages of a megabyte at most.
const (
	MostPoints = 2000    // listed
	mostReply  = 900_000 // bytes
)

// forecast is what a keeper answers, or that it cannot.
func (h *handlers) forecast(data []byte) (any, error) {
	f, can := h.keeper.(Forecaster)
	if !can {
		return notYet(data)
	}
	r, err := decode[protocol.ForecastRequest](data, maxStart)
	if err != nil {
		return nil, err
	}
	if err := inTime(r.ExpiresAt); err != nil {
		return nil, err
	}
	switch {
	case (r.Recipe == "") == (r.RecipeName == ""):
		return nil, protocol.Refuse(400, "forecast: recipe and recipe_name; want exactly one of them")
	case len(r.Recipe) > maxRecipe:
		return nil, protocol.Refuse(413, fmt.Sprintf("forecast: a recipe of %d bytes; want at most %d", len(r.Recipe), maxRecipe))
	}
	if err := short("forecast", map[string]string{"who": r.Who, "recipe_name": r.RecipeName, "aim": r.Aim}); err != nil {
		return nil, err
	}
	reply, err := f.Forecast(h.ctx, r)
	if err != nil {
		return nil, err
	}
	return fitting(reply)
}

// fitting leaves the list of points out where it would not fit into a message.
func fitting(f protocol.Forecast) (json.RawMessage, error) {
	leave := func() {
		f.PointList, f.PointListLeftOut = nil, fmt.Sprintf("%d points are too many for a message; gemel forecast --json lists them", f.Points+f.PointsAdded)
	}
	if len(f.PointList) > MostPoints {
		leave()
	}
	body, err := json.Marshal(f)
	if err == nil && len(body) > mostReply {
		leave()
		body, err = json.Marshal(f)
	}
	return body, err
}
