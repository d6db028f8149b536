package engine

import (
	"bytes"
	"testing"
)

// Any text is an error or a state that encodes to the same text again, and
// what a track encodes is decoded to the same bits.
func FuzzDecodeState(f *testing.F) {
	var t Track
	t.quantity = &Quantity{}
	t.rest(t.quantity)
	t.reset()
	f.Add(t.appendState(nil))
	t.fresh = []entry{{Row: Row{Time: 5, Value: 1.5, HasUncertainty: true, Uncertainty: 0.1, HasID: true, Position: 9}, ID: "r"}}
	t.settle(0)
	f.Add(t.appendState(nil))
	t.rest(&Quantity{Declaration: Declaration{
		Dynamics:      Dynamics{Form: DynamicsRandomWalk, StandardDeviation: 1, Per: 1},
		Repeatability: Repeatability{Form: RepeatabilityKnown, StandardDeviation: 1},
	}})
	t.reset()
	t.fresh = []entry{{Row: Row{Time: 5, Value: 1.5}}}
	t.settle(0)
	f.Add(t.appendState(nil))
	f.Add([]byte{stateVersion, 1})
	f.Add([]byte{0})

	f.Fuzz(func(test *testing.T, b []byte) {
		var first, second Track
		rebuild, err := first.decodeState(b)
		if err != nil || rebuild {
			return
		}
		again := first.appendState(nil)
		if _, err := second.decodeState(again); err != nil {
			test.Fatalf("%x decodes, but %x does not: %v", b, again, err)
		}
		if third := second.appendState(nil); !bytes.Equal(again, third) {
			test.Errorf("%x becomes %x", again, third)
		}
	})
}
