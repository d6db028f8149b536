package engine

import (
	"math"
	"time"
)

// Instant is a moment in nanoseconds since 1970-01-01T00:00:00Z.
type Instant int64

// The admissible instants: from 1678-01-01 to the last that 64 bits hold, in
// April 2262. Beyond them InstantOf saturates to a value that is not Valid.
const (
	MinInstant Instant = -9214560000000000000
	MaxInstant Instant = math.MaxInt64 - 1
)

// InstantOf converts t, saturating outside the admissible range.
func InstantOf(t time.Time) Instant {
	if t.Before(MinInstant.Time()) {
		return math.MinInt64
	}
	if t.After(MaxInstant.Time()) {
		return math.MaxInt64
	}
	return Instant(t.UnixNano())
}

// Time converts i to UTC.
func (i Instant) Time() time.Time { return time.Unix(0, int64(i)).UTC() }

// Valid tells whether i is admissible.
func (i Instant) Valid() bool { return i >= MinInstant && i <= MaxInstant }

// Sub returns i - j in nanoseconds, as a float because the difference of two
// admissible instants can exceed an int64.
func (i Instant) Sub(j Instant) float64 {
	if d := i - j; (d >= 0) == (i >= j) {
		return float64(d)
	}
	return float64(i) - float64(j)
}

// String formats i as RFC 3339 with as many decimals as it needs.
func (i Instant) String() string { return i.Time().Format(time.RFC3339Nano) }
