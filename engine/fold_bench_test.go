package engine

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// BenchmarkFold folds a reading into each form of belief, between two placements of nodes; x/plain
// is its time divided by that of posterior.Constant.AddKnown in the same run, x/held by that of the form
// with r known and without displays. bytes is what a checkpoint of the belief takes.
func BenchmarkFold(b *testing.B) {
	var plain, held float64
	b.Run("plain", func(b *testing.B) {
		var c posterior.Constant
		for i := 0; b.Loop(); i++ {
			c.AddKnown(values[i%len(values)], 0.3)
		}
		plain = float64(b.Elapsed().Nanoseconds()) / float64(b.N)
	})
	for _, c := range foldCases() {
		b.Run(c.name, func(b *testing.B) {
			l := lawOf(c.model)
			rows := make([]entry, 300)
			for i := range rows {
				rows[i].Row = c.row(i)
			}
			base := foldAll(&l, rows)
			b.ReportAllocs()
			i, f, r := len(rows), base.copied(), Row{}
			for b.Loop() {
				if i == 2*len(rows) { // nodes would have been placed anew before long
					b.StopTimer()
					i, f = len(rows), base.copied()
					b.StartTimer()
				}
				r = c.row(i)
				f.add(&l, &r)
				i++
			}
			each := float64(b.Elapsed().Nanoseconds()) / float64(b.N)
			if c.base {
				held = each
			}
			b.ReportMetric(each/plain, "x/plain")
			b.ReportMetric(each/held, "x/held")
			b.ReportMetric(float64(len(f.append(nil, c.model.form))), "bytes")
			if f.bank != nil {
				b.ReportMetric(float64(len(f.bank.nodes)), "nodes")
			}
		})
	}
}

// BenchmarkFoldLevel asks what a scrape and a query ask of each form: the level, its interval
// and the probabilities of a breach.
func BenchmarkFoldLevel(b *testing.B) {
	for _, c := range foldCases() {
		b.Run(c.name, func(b *testing.B) {
			l := lawOf(c.model)
			rows := make([]entry, 300)
			for i := range rows {
				rows[i].Row = c.row(i)
			}
			f := foldAll(&l, rows)
			b.ReportAllocs()
			for b.Loop() {
				figuresOf(f.level(c.model, rows[299].Time+Instant(time.Second)), c.model.declaration())
			}
		})
	}
}

var values = func() []float64 {
	rng := rand.New(rand.NewPCG(1, 2))
	all := make([]float64, 1024)
	for i := range all {
		all[i] = 100 + 0.3*rng.NormFloat64()
	}
	return all
}()

type foldCase struct {
	name  string
	model *model
	row   func(i int) Row
	base  bool // of x/held for the cases after it
}

func foldCases() []foldCase {
	known := Repeatability{Form: RepeatabilityKnown, StandardDeviation: 0.3}
	learned := Repeatability{Form: RepeatabilityLearned, Guess: 0.3, Worth: 4}
	walk := Dynamics{Form: DynamicsRandomWalk, StandardDeviation: 0.1, Per: time.Minute}
	trend := Dynamics{Form: DynamicsLinearTrend, Slope: Slope{StandardDeviation: 1, Per: time.Hour}}
	outliers := Outliers{Probability: 0.01, Inflation: 10}
	display := &Instrument{Number: 1, Declaration: InstrumentDeclaration{Resolution: 0.5}}
	law := modelcheck.LawOf(modelcheck.Settings{})
	of := func(d Declaration, by ...*Instrument) *model {
		d.Prior = Prior{Form: PriorNormal, Mean: 100, StandardDeviation: 5}
		d.Tolerance = Tolerance{HasUpper: true, Upper: 100.5}
		var r readAs
		for _, i := range by {
			r.instruments = append(r.instruments, instrumentUse{declaration: &i.Declaration})
		}
		return newModel(&Quantity{Declaration: d}, by, &r, law)
	}
	value := func(i int) Row {
		return Row{Time: Instant(i) * Instant(time.Second), Value: values[i%len(values)]}
	}
	shown := func(i int) Row {
		r := value(i)
		r.Value, r.Instrument = math.Round(2*r.Value)/2, 1
		return r
	}
	return []foldCase{
		{"sums", of(Declaration{Repeatability: known}), value, true},
		{"sums,learned", of(Declaration{Repeatability: learned}), value, false},
		{"counts", of(Declaration{Repeatability: known}, display), shown, false},
		{"counts,learned", of(Declaration{Repeatability: learned}, display), shown, false},
		{"walk", of(Declaration{Repeatability: known, Dynamics: walk}), value, true},
		{"walk,bank", of(Declaration{Repeatability: learned, Dynamics: walk}), value, false},
		{"walk,grid", of(Declaration{Repeatability: known, Dynamics: walk, Outliers: outliers}), value, false},
		{"walk,grid,display", of(Declaration{Repeatability: known, Dynamics: walk}, display), shown, false},
		{"walk,grid,learned", of(Declaration{Repeatability: learned, Dynamics: walk, Outliers: outliers}), value, false},
		{"trend", of(Declaration{Repeatability: known, Dynamics: trend}), value, true},
		{"trend,bank", of(Declaration{Repeatability: learned, Dynamics: trend}), value, false},
	}
}
