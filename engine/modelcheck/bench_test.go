package modelcheck_test

import (
	"fmt"
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
	for _, window := range []int{16, 32, 64, 256} {
		law := modelcheck.LawOf(modelcheck.Settings{Window: window})
		for name, score := range map[string]func(i int64) float64{
			"scattered": func(i int64) float64 { return float64(i%5 - 2) },
			"alike":     func(int64) float64 { return 1 },
		} {
			var tally modelcheck.Tally
			for i := range int64(window) {
				tally.Add(&law, modelcheck.ScoreAt(score(i)), i*hour)
			}
			b.Run(fmt.Sprintf("%s/window=%d", name, window), func(b *testing.B) {
				b.ReportAllocs()
				for b.Loop() {
					tally.Report(&law)
				}
			})
		}
	}
}

func BenchmarkLawOf(b *testing.B) {
	for b.Loop() {
		modelcheck.LawOf(modelcheck.Settings{})
	}
}

func BenchmarkExplain(b *testing.B) {
	rng := rand.New(rand.NewPCG(1, 0))
	for _, n := range []int{64, 1024} {
		known, learned := make([]modelcheck.Point, n), make([]modelcheck.Point, n)
		for i := range known {
			known[i] = modelcheck.Point{Seconds: float64(i), Value: rng.NormFloat64(), Variance: 1}
			learned[i] = known[i]
			learned[i].Variance, learned[i].Learned = 0, 1
		}
		for name, points := range map[string][]modelcheck.Point{"known": known, "learned": learned} {
			b.Run(fmt.Sprintf("%s/readings=%d", name, n), func(b *testing.B) {
				b.ReportAllocs()
				for b.Loop() {
					modelcheck.Explain(points, 0, modelcheck.Learned{})
				}
			})
		}
	}
}
