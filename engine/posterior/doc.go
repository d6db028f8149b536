// Package posterior holds the statistics of one quantity: how a belief about its
// true value follows from a prior and readings, and what can be read off it.
// Everything is a pure function of numbers: no clock, no randomness, no state
// beyond the values it is given.
package posterior
