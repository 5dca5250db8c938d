// Package forecast works out what a plan will do on a bench, how long it takes and what it will be
// worth, without moving anything. Time comes from the engine's own decisions (engine.Outlook) and from
// the ways that package route finds; counts come from the source model, or from an earlier run; the
// uncertainty comes from the estimate itself, asked about rows that hold the counts to be expected.
//
// It promises geometry and time for every point, whatever their number; rates from at most 2000
// evaluations, interpolated in between, with the error that it found there; and a sum of its kinds of
// time that is the duration. It refuses nothing: what cannot work becomes a warning with numbers.
//
// It assumes that every reading succeeds at its first attempt, that every reference is good, that no
// guard breaks and that a warm-up is as short as it can be.
package forecast
