package keeper

import (
	"context"
	"errors"
	"time"

	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
)

// Forecast says what a recipe would do if it were started now. It writes nothing and touches no
// instrument, whatever the bench does meanwhile.
func (k *Keeper) Forecast(ctx context.Context, q protocol.ForecastRequest) (protocol.Forecast, error) {
	if k.Foresee == nil {
		return protocol.Forecast{}, protocol.Refuse(501, "this daemon makes no forecasts")
	}
	text := q.Recipe
	if q.RecipeName != "" {
		if k.Recipe == nil {
			return protocol.Forecast{}, protocol.Refuse(404, "no folder of recipes is configured; send the recipe's text")
		}
		var err error
		if text, err = k.Recipe(q.RecipeName); err != nil {
			return protocol.Forecast{}, protocol.Refuse(404, err.Error())
		}
	}
	now := time.Now()
	earlier := k.earlierNow(ctx)
	plan, err := k.Plan(text, now, earlier.find)
	if earlier.broken != nil {
		return protocol.Forecast{}, earlier.broken
	}
	if err != nil {
		refusal := protocol.Refuse(422, "the recipe cannot be run: "+err.Error())
		if e, ok := errors.AsType[*strict.Error](err); ok {
			refusal.Findings = e.Findings
		}
		return protocol.Forecast{}, refusal
	}
	return k.Foresee(ctx, plan, now, q.Aim)
}

// Earlier finds values of earlier results as they are now, for a plan that is not run.
func (k *Keeper) Earlier(ctx context.Context) func(scan.EarlierAsk) (scan.EarlierSource, error) {
	return k.earlierNow(ctx).find
}
