package persist

import (
	"math"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

// What a value says of the indication, in rows.
const (
	// A control byte that announces more bytes than a number has stands before the
	// row's own; its other bits are the extent and the two below.
	extentEscape  = 9 << squeezeWidth
	extentBits    = 1<<0 | 1<<1
	extentUpper   = 1 << 2 // the row has an upper
	extentSamples = 1 << 3 // the number of samples isn't that of the row before
	escapeMask    = 0xF0
)

// hasExtent tells whether what is recorded of a reading beside its value is more
// than version 2 knows.
func hasExtent(e engine.Extent, upper float64, samples uint32) bool {
	return e != engine.ExtentValue || math.Float64bits(upper) != 0 || samples != 0
}

func sameExtent(r, before *engine.Row) bool {
	return r.Extent == before.Extent && r.Samples == before.Samples && math.Float64bits(r.Upper) == math.Float64bits(before.Upper)
}

// appendExtent appends what a row's value says of the indication. It holds for the
// rows after it too, so that a run of readings below one limit states it once.
func appendExtent(b []byte, r, before *engine.Row) []byte {
	control := extentEscape | byte(r.Extent)
	if math.Float64bits(r.Upper) != 0 {
		control |= extentUpper
	}
	if r.Samples != before.Samples {
		control |= extentSamples
	}
	b = append(b, control)
	if control&extentSamples != 0 {
		b = protowire.AppendVarint(b, uint64(r.Samples))
	}
	if control&extentUpper != 0 {
		change, control := squeeze(r.Upper, before.Upper)
		b = appendLow(append(b, control), change, control)
	}
	return b
}

// takeExtent reads what appendExtent wrote and returns its length, or -1. r has
// what the row before had.
func takeExtent(b []byte, r *engine.Row) int {
	control, before := b[0], r.Upper
	n := 1
	r.Extent, r.Upper = engine.Extent(control&extentBits), 0
	if control&extentSamples != 0 {
		v, used := protowire.ConsumeVarint(b[n:])
		if used < 0 || v > math.MaxUint32 {
			return -1
		}
		r.Samples = uint32(v)
		n += used
	}
	if control&extentUpper == 0 {
		return n
	}
	v, used := takeNumber(b[n:], before)
	if used < 0 {
		return -1
	}
	r.Upper = v
	return n + used
}
