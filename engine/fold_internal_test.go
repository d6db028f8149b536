package engine

import (
	"testing"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// breaking is a belief given r that no reading can be folded into.
type breaking struct{ holder }

func (breaking) add(*model, *Row, float64) heard { panic("beyond what it can hold") }

// Numbers beyond what a form can hold lose that belief, which says so by being undetermined, and
// neither the process nor the count of readings.
func TestBeliefThatCannotBeHeldIsUndetermined(t *testing.T) {
	q := &Quantity{Declaration: Declaration{
		Repeatability: Repeatability{Form: RepeatabilityKnown, StandardDeviation: 1},
		Outliers:      Outliers{Probability: 0.1, Inflation: 2},
	}}
	m := newModel(q, nil, &readAs{}, modelcheck.LawOf(modelcheck.Settings{}))
	l := lawOf(m)
	f := fold{bank: &bank{nodes: []node{{held: breaking{}}}}}
	for i := range 2 {
		if said := f.add(&l, &Row{Time: Instant(i), Value: 5}); said.foretold {
			t.Errorf("reading %d: something was foretold", i)
		}
	}
	if got := f.level(m, 3).Form(); got != posterior.FormNone || !f.lost || f.count != 2 {
		t.Errorf("form %v, lost %v, %d readings; want none, true, 2", got, f.lost, f.count)
	}
	if got := f.predictive(m, 3, nil).Form(); got != posterior.FormNone {
		t.Errorf("the predictive has form %v", got)
	}
	if f.outgrown(m) {
		t.Error("a lost belief is to be folded again")
	}
}
