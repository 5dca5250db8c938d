// Package engine runs a plan on a bench: one reading after another, each proved, each written
// before anybody hears of it and before anything moves on. It knows instruments by the interfaces
// of package drivers and the logbook by one method, and it knows nothing of files, databases or
// networks.
package engine
