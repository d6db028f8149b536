package modelcheck_test

import (
	"math/rand/v2"
	"testing"

	"leadline.example/engine/modelcheck"
)

func BenchmarkAdd(b *testing.B) {
	rng := rand.New(rand.NewPCG(1, 0))
	law := modelcheck.LawOf(modelcheck.Settings{})
	var z [1024]float64
	for i := range z {
		z[i] = rng.NormFloat64()
	}
	for name, score := range map[string]func(z float64) modelcheck.Score{
		"value":   modelcheck.ScoreAt,
		"display": func(z float64) modelcheck.Score { return modelcheck.Score{Lower: z - 0.3, Upper: z + 0.3} },
	} {
		b.Run(name, func(b *testing.B) {
			b.ReportAllocs()
			var tally modelcheck.Tally
			i := int64(0)
			for b.Loop() {
				tally.Add(&law, score(z[i&1023]), i*1e9)
				i++
			}
		})
	}
}

func BenchmarkReport(b *testing.B) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	var tally modelcheck.Tally
	for i := range int64(64) {
		tally.Add(&law, modelcheck.ScoreAt(float64(i%5-2)), i*hour)
	}
	b.ReportAllocs()
	for b.Loop() {
		tally.Report(&law)
	}
}

func BenchmarkLawOf(b *testing.B) {
	for b.Loop() {
		modelcheck.LawOf(modelcheck.Settings{})
	}
}

func BenchmarkExplain(b *testing.B) {
	rng := rand.New(rand.NewPCG(1, 0))
	var points [64]modelcheck.Point
	for i := range points {
		points[i] = modelcheck.Point{Seconds: float64(i), Value: rng.NormFloat64(), Variance: 1}
	}
	for b.Loop() {
		modelcheck.Explain(points[:], 0)
	}
}
