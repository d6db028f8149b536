package engine_test

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"leadline.example/engine"
	"leadline.example/engine/modelcheck"
)

func (r *rig) modelCheck(id engine.QuantityID) engine.ModelCheckReport {
	r.t.Helper()
	c, err := r.keeper.ModelCheck(context.Background(), id, seconds(1e9))
	if err != nil {
		r.t.Fatal(err)
	}
	return c
}

// Michelson's 100 values raise SERIAL in the first window, readings 3 to 66, as the first two
// under a vague prior have no score. The explanations are those of SciPy (testdata/reference/explain.py).
func TestModelCheckExplainsTheReadingsThatRaisedSerial(t *testing.T) {
	b, err := os.ReadFile(filepath.Join("..", "testdata", "reference", "explain.json"))
	if err != nil {
		t.Fatal(err)
	}
	type account struct {
		LogLikelihood        float64 `json:"log_likelihood"`
		R, Walk, SD, Seconds float64
	}
	var cases []struct {
		Name                         string
		Value                        []float64
		Declared, Moving, Correlated account
	}
	if err := json.Unmarshal(b, &cases); err != nil {
		t.Fatal(err)
	}
	all, window := cases[0], cases[1]
	if all.Name != "michelson" || window.Name != "michelson, readings 3 to 66" || !slices.Equal(all.Value[2:66], window.Value) {
		t.Fatalf("the first cases are %s and %s", all.Name, window.Name)
	}

	r := newRig(t, engine.Options{})
	d := engine.Declaration{Unit: "Mm/s", Repeatability: engine.Repeatability{Form: engine.RepeatabilityLearnedReference}}
	r.declare("light", d)
	for i, y := range all.Value {
		r.post(seconds(1e9), reading("light", seconds(86400*float64(i)), y, ""))
	}
	c := r.modelCheck("light")
	if c.Report.Result != modelcheck.Serial || !c.HasExplanation || c.Explanation.Readings != 64 {
		t.Fatalf("%v, explained: %+v", c.Report.Result, c.Explanation)
	}
	e := &c.Explanation
	for _, test := range []struct {
		name                 string
		got, want, tolerance float64
	}{
		{"declared", e.Declared, window.Declared.LogLikelihood, 1e-3},
		{"r", e.R, window.Declared.R, 1e-4},
		{"moving", e.Moving.LogLikelihood, window.Moving.LogLikelihood, 1e-3},
		{"moving: walk", e.Moving.Walk, window.Moving.Walk, 2e-3 * window.Moving.Walk},
		{"moving: r", e.Moving.R, window.Moving.R, 1e-4},
		{"correlated", e.Correlated.LogLikelihood, window.Correlated.LogLikelihood, 1e-3},
		{"correlated: sd", e.Correlated.SD, window.Correlated.SD, 1e-4},
		{"correlated: seconds", e.Correlated.Seconds, window.Correlated.Seconds, 2e-3 * window.Correlated.Seconds},
	} {
		if !(math.Abs(test.got-test.want) <= test.tolerance) {
			t.Errorf("%s is %v, want %v", test.name, test.got, test.want)
		}
	}
}

// wavering is an invented quantity with a reading every 10 seconds.
func wavering(n int) []engine.Reading {
	all := make([]engine.Reading, n)
	for i := range all {
		all[i] = reading("gap", seconds(10*float64(i)), 100+math.Sin(float64(i*i)), engine.ReadingID(fmt.Sprint("gap-", i)))
	}
	return all
}

// Explained are the readings of the last full window, before it all, whether or not they are in
// memory, and in canonical order.
func TestModelCheckExplainsTheLastFullWindow(t *testing.T) {
	learned := engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
	for _, test := range []struct {
		name        string
		change      func(d *engine.Declaration)
		first, last int // explained ones of so many readings, from 0; last exclusive
		readings    int
	}{
		{"too few", nil, 0, 0, 15},
		{"first window", nil, 0, 16, 16},
		{"first window, and the next all but full", nil, 0, 16, 31},
		{"second window", nil, 16, 32, 32},
		{"in storage", nil, 480, 496, 500},
		{"wide, in storage", func(d *engine.Declaration) { d.ModelCheck.Window = 200 }, 200, 400, 599},
		{"before the first window", func(d *engine.Declaration) { d.ModelCheck.Window = 64 }, 0, 63, 63},
		{"walk", func(d *engine.Declaration) { d.Dynamics = walking().Dynamics }, 16, 32, 40},
		{"first of a vague prior unscored", func(d *engine.Declaration) { d.Prior = engine.Prior{} }, 17, 33, 48},
		{"first two of a learned repeatability unscored", func(d *engine.Declaration) { d.Prior, d.Repeatability = engine.Prior{}, learned }, 2, 18, 33},
		{"bank", func(d *engine.Declaration) {
			d.Prior, d.Repeatability, d.Dynamics = engine.Prior{}, learned, walking().Dynamics
			d.Repeatability.Floor = 0.2
		}, 2, 18, 33},
	} {
		t.Run(test.name, func(t *testing.T) {
			d := gap()
			d.ModelCheck.Window = 16
			if test.change != nil {
				test.change(&d)
			}
			r := newRig(t, engine.Options{CheckpointRecords: 50})
			r.declare("gap", d)
			all := wavering(test.readings)
			late := []int{3, test.readings - 5}
			for i := range all {
				if !slices.Contains(late, i) {
					r.post(seconds(1e9), all[i])
				}
			}
			for _, i := range late {
				r.post(seconds(1e9), all[i])
			}
			points, walk := []modelcheck.Point(nil), 0.0
			for i := test.first; i < test.last; i++ {
				p := modelcheck.Point{Seconds: 10 * float64(i-test.first), Value: all[i].Value, Variance: 1}
				if d.Repeatability.Learned() {
					p.Variance, p.Learned = 0, 1
				}
				points = append(points, p)
			}
			if d.Dynamics.Form == engine.DynamicsRandomWalk {
				walk = 0.3 * 0.3 / 60
			}
			var want modelcheck.Explanation
			if len(points) > 0 {
				want = modelcheck.Explain(points, walk, modelcheck.Learned{Floor: d.Repeatability.Floor})
			}
			for _, restarted := range []bool{false, true} {
				if restarted {
					r.restart(true)
				}
				r.settled("gap", engine.BeliefQuery{Now: seconds(1e9)})
				c := r.modelCheck("gap")
				if c.HasExplanation != (len(points) > 0) || !sameExplanation(&c.Explanation, &want) {
					t.Errorf("restarted %v: %+v, want %+v", restarted, c.Explanation, want)
				}
			}
		})
	}
}

// sameExplanation compares likelihoods of points that differ by rounding.
func sameExplanation(a, b *modelcheck.Explanation) bool {
	return a.Readings == b.Readings && math.Abs(a.Declared-b.Declared) < 1e-7 &&
		math.Abs(a.Moving.LogLikelihood-b.Moving.LogLikelihood) < 1e-5 && math.Abs(a.Correlated.LogLikelihood-b.Correlated.LogLikelihood) < 1e-5
}

// A reading is explained less its bias, with the variance of its display and of a mean, and with r
// learned where it informs r; one that is beyond the scale says nothing two-sided.
func TestModelCheckExplainsWhatReadingsSay(t *testing.T) {
	coarse := engine.InstrumentDeclaration{
		Unit: "mm", Resolution: 0.3,
		Calibrations: []engine.Calibration{
			{ValidFrom: seconds(-1000), Bias: 1, BiasStandardUncertainty: 0.3},
			{ValidFrom: seconds(200), Bias: -2, BiasStandardUncertainty: 0.3},
		},
	}
	own := with(coarse, func(d *engine.InstrumentDeclaration) { d.Repeatability.StandardDeviation = 0.5 })
	for _, test := range []struct {
		name          string
		repeatability engine.Repeatability
		instrument    engine.InstrumentDeclaration
		change        func(i int, r *engine.Reading, p *modelcheck.Point) bool // false: not explained
		learned       modelcheck.Learned
	}{
		{"known", gap().Repeatability, own, func(i int, r *engine.Reading, p *modelcheck.Point) bool {
			p.Variance += 0.5 * 0.5
			if i%2 == 0 {
				r.HasUncertainty, r.RandomStandardUncertainty = true, 0.7
				p.Variance += 0.7*0.7 - 0.5*0.5
			}
			return true
		}, modelcheck.Learned{}},
		{"learned, means", engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.5, Worth: 4, Floor: 0.4}, coarse, func(i int, r *engine.Reading, p *modelcheck.Point) bool {
			r.Samples = 1 + uint32(i%3)
			p.Learned = 1 / float64(1+i%3)
			return true
		}, modelcheck.Learned{Guess: 0.5, Worth: 4, Floor: 0.4}},
		{"displayed and beyond the scale", engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.5, Worth: 4}, with(coarse, func(d *engine.InstrumentDeclaration) {
			d.MeasuringInterval = engine.MeasuringInterval{HasUpper: true, Upper: 100.9}
		}), func(_ int, r *engine.Reading, p *modelcheck.Point) bool {
			p.Learned = 1
			return r.Value <= 100.9
		}, modelcheck.Learned{Guess: 0.5, Worth: 4}},
	} {
		t.Run(test.name, func(t *testing.T) {
			r := newRig(t, engine.Options{})
			d := gap()
			d.Repeatability = test.repeatability
			r.declare("gap", d)
			r.declareInstrument("gauge", test.instrument)
			var points []modelcheck.Point
			for i, y := range wavering(40) {
				y.Instrument = "gauge"
				bias := 1.0
				if i >= 20 {
					bias = -2
				}
				p := modelcheck.Point{Seconds: 10 * float64(i), Value: y.Value - bias, Variance: 0.3 * 0.3 / 12}
				if test.change(i, &y, &p) {
					points = append(points, p)
				}
				if res := r.post(seconds(1e9), y); res[0].Status != engine.Applied {
					t.Fatalf("%+v", res[0])
				}
			}
			want := modelcheck.Explain(points, 0, test.learned)
			r.settled("gap", engine.BeliefQuery{Now: seconds(1e9)})
			if c := r.modelCheck("gap"); !c.HasExplanation || !sameExplanation(&c.Explanation, &want) {
				t.Errorf("%+v, want %+v", c.Explanation, want)
			}
		})
	}
}

// Readings that are all alike leave nothing to explain.
func TestModelCheckOfOneValueExplainsNothing(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare("gap", with(gap(), func(d *engine.Declaration) {
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
	}))
	for i := range 20 {
		r.post(seconds(1e9), reading("gap", seconds(float64(i)), 7, ""))
	}
	if c := r.modelCheck("gap"); c.HasExplanation {
		t.Errorf("%+v", c.Explanation)
	}
}
