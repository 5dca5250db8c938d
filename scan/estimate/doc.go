// Package estimate turns logbook rows into a result that an auditor can follow: raw counts first,
// then each correction by itself, then an uncertainty budget.
//
// It promises that the same rows give the same digits: there is no clock, no file, no network and
// no randomness here but the seeded kind. It refuses, with every reason at once (a *Refusal),
// rather than print a number that the rows and the declared constants do not carry: counts that
// were not latched together, a constant without an uncertainty, a filter that does not pass the
// heralded band, a dead time beyond the reach of its model.
//
// Sources that every file leans on: JCGM 100:2008 (uncertainty), JCGM 101:2008 (Monte Carlo),
// Klyshko, Sov. J. Quantum Electron. 10, 1112 (1980) (efficiency by pairs). Papers are cited as
// they are remembered; where a formula was derived here it says so, and names the test that holds it
// against simulated events.
package estimate
