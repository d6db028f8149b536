package engine

// WithGeneration lets the window of reading IDs hold as few as n, which must be
// more than a test has in flight.
func WithGeneration(o Options, n int) Options {
	o.minGeneration = n
	return o
}
