package posterior_test

import (
	"bytes"
	"encoding/binary"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// A filter read back, or cloned, goes on with the same bits and leaves the first alone.
func TestFilterGoesOnAfterARestart(t *testing.T) {
	t.Logf("-seed %d", *seed)
	for n := range uint64(100) {
		f := randomFilter(rand.New(rand.NewPCG(*seed, n)), false)
		written := f.AppendBinary(nil)
		read, err := posterior.DecodeFilter(written)
		if err != nil {
			t.Fatal(err)
		}
		clone := f.Clone()
		for _, other := range []*posterior.Filter{&read, &clone} {
			if other.Vague() != f.Vague() || other.States() != f.States() {
				t.Fatalf("case %d: another filter", n)
			}
			other.Advance(3)
			other.Update(5, 0, 1, nil, 0.2)
			other.Add(posterior.Process{Variance: 1})
		}
		if !bytes.Equal(read.AppendBinary(nil), clone.AppendBinary(nil)) {
			t.Errorf("case %d: a restart changes what comes next", n)
		}
		if !bytes.Equal(f.AppendBinary(nil), written) {
			t.Errorf("case %d: a clone shares something", n)
		}
	}
}

func TestDecodeFilterRefuses(t *testing.T) {
	f := posterior.NewFilter(posterior.Motion{Form: posterior.MotionTrend}, posterior.Prior{SD: 1}, posterior.SlopePrior{SD: 1})
	f.Add(posterior.Process{Variance: 1})
	good := f.AppendBinary(nil)
	number := func(at int, x float64) func([]byte) []byte {
		return func(b []byte) []byte {
			binary.LittleEndian.PutUint64(b[4+8*at:], math.Float64bits(x))
			return b
		}
	}
	set := func(at int, x byte) func([]byte) []byte {
		return func(b []byte) []byte { b[at] = x; return b }
	}
	for name, change := range map[string]func([]byte) []byte{
		"nothing":           func([]byte) []byte { return nil },
		"a byte short":      func(b []byte) []byte { return b[:len(b)-1] },
		"a byte more":       func(b []byte) []byte { return append(b, 0) },
		"another version":   set(0, 2),
		"no slope":          set(1, 1),
		"too many states":   set(1, posterior.MaxStates+1),
		"another form":      set(2, 4),
		"half vague":        set(3, 2),
		"negative walk":     number(0, -1),
		"NaN as the mean":   number(5, math.NaN()),
		"negative variance": number(5+2, -1e-300),
		"infinite variance": number(5+2, math.Inf(1)),
		"infinite factor":   number(5+6*3, math.Inf(-1)),
	} {
		if _, err := posterior.DecodeFilter(change(bytes.Clone(good))); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
	if _, err := posterior.DecodeFilter(good); err != nil {
		t.Error(err)
	}
}
