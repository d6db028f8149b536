package posterior

import (
	"math"
	"slices"
)

// Counts holds what displayed, censored and exact readings say of a quantity that
// does not move, all with the same bias or none: sums of the exact ones, and how
// often each distinct interval occurred. The zero value is "no reading yet".
//
// Each displayed reading could instead be taken for a normal one of added variance
// d^2/12; where r is below d that fails, as the errors of rounding are then not
// independent: a hundred readings that show the same value say little more than one.
// Moment matching reading by reading fails too, and depends on their order. Counts
// lose nothing, don't depend on the order, and the posterior is integrated when it
// is asked for.
//
// It takes 240 bytes and some 56 for each distinct interval.
type Counts struct {
	own    Constant // exact, of their own standard deviation
	shared averages // exact, of noise r
	seen   []tally
	slots  []uint32 // open hash of seen: index + 1, or 0
	others int64    // readings in seen
}

// outcome is what an interval reading says and how noisy it was.
type outcome struct {
	Indication
	sd      float64 // the reading's own; 0: it is r / sqrt(samples)
	samples float64 // 0 if sd > 0
}

// tally is how often an outcome occurred.
type tally struct {
	outcome
	count int64
}

// averages sums exact readings of variance r^2 / samples.
type averages struct {
	count  int64
	origin float64
	weight pair // sum of samples
	moment pair // sum of samples (y - origin)
	square pair // sum of samples (y - origin)^2
}

// Add adds a reading. sd > 0 is the standard deviation of its own white noise;
// with sd 0 that is r / sqrt(samples), r being what Noise says and samples >= 1.
// Limits of magnitude as for Constant; Lower < Upper of an interval, one of them
// finite.
func (c *Counts) Add(y Indication, sd, samples float64) {
	switch {
	case !y.Exact():
		c.count(outcome{Indication{y.Lower + 0, y.Upper + 0}, sd, samples}) // + 0 makes -0 the same as 0
	case sd > 0:
		c.own.AddKnown(y.Lower, sd)
	default:
		c.shared.add(y.Lower, samples)
	}
}

// Count returns the number of readings added.
func (c *Counts) Count() int { return c.own.Count() + int(c.shared.count+c.others) }

// Distinct returns the number of different intervals among them.
func (c *Counts) Distinct() int { return len(c.seen) }

// Clone returns a copy that shares nothing with c.
func (c *Counts) Clone() Counts {
	out := *c
	out.seen, out.slots = slices.Clone(c.seen), slices.Clone(c.slots)
	return out
}

func (a *averages) add(y, samples float64) {
	if a.count == 0 {
		a.origin = y
	}
	a.count++
	d := twoDiff(y, a.origin)
	a.weight = a.weight.plus(pair{hi: samples})
	a.moment = a.moment.plus(d.times(samples))
	a.square = a.square.plus(d.squared().times(samples))
}

// mean of the readings, of which there is one.
func (a *averages) mean() Level {
	return levelOf(a.moment.ratio(a.weight).plus(pair{hi: a.origin}))
}

// deviation returns the weighted sum of squares about the mean: 0 if all are equal.
func (a *averages) deviation() float64 {
	if a.count < 2 {
		return 0
	}
	return a.square.minus(a.moment.squared().ratio(a.weight)).value()
}

// count counts an outcome.
func (c *Counts) count(o outcome) {
	if o.sd > 0 {
		o.samples = 0
	}
	c.others++
	if 2*len(c.seen) >= len(c.slots) {
		c.place()
	}
	i := c.find(o)
	if c.slots[i] == 0 {
		c.seen = append(c.seen, tally{outcome: o})
		c.slots[i] = uint32(len(c.seen))
	}
	c.seen[c.slots[i]-1].count++
}

// find returns the slot of an outcome, or the free one where it belongs.
func (c *Counts) find(o outcome) uint64 {
	mask := uint64(len(c.slots) - 1)
	i := o.hash() >> 32 & mask
	for c.slots[i] != 0 && c.seen[c.slots[i]-1].outcome != o {
		i = (i + 1) & mask
	}
	return i
}

// hash mixes the bits by multiplication (Knuth, The Art of Computer Programming
// vol. 3, 6.4, from memory: the multiplier is 2^64 over the golden ratio).
func (o *outcome) hash() uint64 {
	const multiplier = 0x9e3779b97f4a7c15
	h := math.Float64bits(o.Lower) * multiplier
	h = (h ^ h>>29 ^ math.Float64bits(o.Upper)) * multiplier
	h = (h ^ h>>29 ^ math.Float64bits(o.sd) ^ math.Float64bits(o.samples)<<1) * multiplier
	return h ^ h>>29
}

// place makes the hash anew, with room for as many outcomes again.
func (c *Counts) place() {
	size := 8
	for size < 4*len(c.seen) {
		size *= 2
	}
	c.slots = make([]uint32, size)
	for i := range c.seen {
		c.slots[c.find(c.seen[i].outcome)] = uint32(i + 1)
	}
}
