package engine

import (
	"bytes"
	"testing"

	"leadline.example/engine/modelcheck"
)

// Any text is an error or a state that encodes to the same text again, and
// what a track encodes is decoded to the same bits.
func FuzzDecodeState(f *testing.F) {
	gauge := &Instrument{Number: 1, Revision: 3, Declaration: InstrumentDeclaration{
		Repeatability: InstrumentRepeatability{StandardDeviation: 0.1, BetweenOccasions: 0.2, Correlated: Correlated{0.1, 1}},
		Calibrations:  []Calibration{{Bias: 1, BiasStandardUncertainty: 0.5, Reference: "block", CommonStandardUncertainty: 0.1}},
	}}
	known := []*instrumentTrack{{number: 1, current: gauge}}
	law := modelcheck.LawOf(modelcheck.Settings{})
	modelOf := func(q *Quantity, instruments []*Instrument, r readAs) *model {
		for _, i := range instruments {
			r.instruments = append(r.instruments, instrumentUse{declaration: &i.Declaration})
		}
		return newModel(q, instruments, &r, law)
	}
	var t Track
	t.quantity = &Quantity{}
	t.rest(modelOf(t.quantity, nil, readAs{}))
	t.reset()
	f.Add(t.appendState(nil))
	t.fresh = []entry{{Row: Row{Time: 5, Value: 1.5, HasUncertainty: true, Uncertainty: 0.1, HasID: true, Position: 9}, ID: "r"}}
	t.settle(0)
	f.Add(t.appendState(nil))
	moving := &Quantity{Declaration: Declaration{
		Dynamics:      Dynamics{Form: DynamicsRandomWalk, StandardDeviation: 1, Per: 1},
		Repeatability: Repeatability{Form: RepeatabilityKnown, StandardDeviation: 1},
	}}
	learned := &Quantity{Declaration: Declaration{
		Dynamics:      moving.Declaration.Dynamics,
		Repeatability: Repeatability{Form: RepeatabilityLearned, Guess: 1, Worth: 20},
	}}
	still := &Quantity{Declaration: Declaration{Repeatability: moving.Declaration.Repeatability}}
	for _, m := range []*model{
		modelOf(moving, nil, readAs{}), modelOf(moving, []*Instrument{gauge}, readAs{}), modelOf(learned, nil, readAs{}),
		modelOf(still, nil, readAs{censored: true}), modelOf(moving, nil, readAs{censored: true}), modelOf(learned, nil, readAs{censored: true}),
	} {
		t.rest(m)
		t.reset()
		instruments := m.instruments
		r := Row{Time: 5, Value: 1.5, Instrument: InstrumentNumber(len(instruments)), Occasion: 7}
		if t.used = nil; r.Instrument > 0 {
			t.used, _ = addUse(nil, &r)
		}
		t.fresh = []entry{{Row: r}}
		t.settle(0)
		f.Add(t.appendState(nil))
	}
	f.Add([]byte{stateVersion, 1})
	f.Add([]byte{0})

	f.Fuzz(func(test *testing.T, b []byte) {
		var first, second Track
		rebuild, err := first.decodeState(b, known)
		if err != nil || rebuild {
			return
		}
		rest := func(t *Track) {
			var named []*Instrument
			if len(t.used) > 0 {
				named = append(named, gauge)
			}
			m := modelOf(moving, named, readAs{})
			m.form = t.held
			t.rest(m)
		}
		rest(&first)
		again := first.appendState(nil)
		if _, err := second.decodeState(again, known); err != nil {
			test.Fatalf("%x decodes, but %x does not: %v", b, again, err)
		}
		rest(&second)
		if third := second.appendState(nil); !bytes.Equal(again, third) {
			test.Errorf("%x becomes %x", again, third)
		}
	})
}
