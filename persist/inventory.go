package persist

import (
	"encoding/binary"
	"fmt"
	"maps"
	"math"
	"slices"

	"leadline.example/engine"
)

// inventory is what a verifier remembers of each quantity, to tell whether
// the checkpoint lacks anything; checksums can't. It is small beside the file,
// so readings and rows are compared by their number and a sum.
type inventory map[engine.QuantityNumber]*stock

type stock struct {
	quantity, state bool  // in the checkpoint
	recorded        bool  // in the ledger, up to where the last sweep includes it
	readings        total // likewise
	rows            total // in complete segments
}

// total is a multiset of rows: how many they are, and a sum that doesn't
// depend on their order.
type total struct {
	count int
	sum   uint64
}

// of returns the stock of a quantity.
func (v inventory) of(n engine.QuantityNumber) *stock {
	s := v[n]
	if s == nil {
		s = new(stock)
		v[n] = s
	}
	return s
}

// add takes one row. Position and all else go into the sum, so that one row
// lost and another there twice changes it.
func (t *total) add(r *engine.Row) {
	flags := uint64(0)
	if r.HasID {
		flags |= rowHasID
	}
	if r.HasUncertainty {
		flags |= rowHasUncertainty
	}
	h := uint64(0)
	for _, field := range [...]uint64{
		uint64(r.Position), uint64(r.Time), math.Float64bits(r.Value), math.Float64bits(r.Uncertainty), flags,
		uint64(r.Extent), math.Float64bits(r.Upper), uint64(r.Samples),
	} {
		h = scramble(h ^ field)
	}
	t.count++
	t.sum += h
}

// scramble is the output function of SplitMix64 (Steele, Lea and Flood, 2014,
// "Fast splittable pseudorandom number generators", mix64; constants from
// memory), after its increment so that 0 doesn't map to 0.
func scramble(x uint64) uint64 {
	x += 0x9E3779B97F4A7C15
	x = (x ^ x>>30) * 0xBF58476D1CE4E5B9
	x = (x ^ x>>27) * 0x94D049BB133111EB
	return x ^ x>>31
}

// check reports what is missing, by number.
func (v inventory) check(report func(error)) {
	next := engine.QuantityNumber(1)
	for _, n := range slices.Sorted(maps.Keys(v)) {
		s := v[n]
		if s.quantity || s.state {
			if err := checkEntry(next, n, s.quantity, s.state); err != nil {
				report(err)
			}
			next = n + 1
		} else if s.recorded {
			report(fmt.Errorf("%w: the checkpoint of quantity %d is missing", ErrDamaged, n))
			next = n + 1
		}
		switch {
		case s.rows.count != s.readings.count:
			report(fmt.Errorf("%w: quantity %d has %d rows for %d readings", ErrDamaged, n, s.rows.count, s.readings.count))
		case s.rows.sum != s.readings.sum:
			report(fmt.Errorf("%w: the %d rows of quantity %d aren't those of its readings", ErrDamaged, s.rows.count, n))
		}
	}
}

// numberOf reads the number at the beginning of a key.
func numberOf(key []byte) engine.QuantityNumber {
	return engine.QuantityNumber(binary.BigEndian.Uint32(key))
}
