package posterior_test

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"leadline.example/engine/posterior"
)

// plainNanoseconds measures Constant.AddKnown in the same run.
func plainNanoseconds() float64 {
	const n = 2_000_000
	var c posterior.Constant
	start := time.Now()
	for i := range n {
		c.AddKnown(float64(i&7), 0.5)
	}
	return float64(time.Since(start).Nanoseconds()) / n
}

func BenchmarkGrid(b *testing.B) {
	const r = 0.1
	walk := posterior.Motion{Form: posterior.MotionWalk, Walk: r * r / 4}
	outliers := posterior.Spread{SD: r, OutlierProbability: 0.01, Inflation: 10}
	for _, c := range []struct {
		name   string
		motion posterior.Motion
		bias   posterior.Bias
		kind   kind
		noise  posterior.Spread
	}{
		{"constant/displays", posterior.Motion{}, posterior.Bias{}, kind{displayed: true}, posterior.Spread{SD: r}},
		{"constant/censoring", posterior.Motion{}, posterior.Bias{}, kind{censored: true, exact: true}, posterior.Spread{SD: r}},
		{"walk/values", walk, posterior.Bias{}, kind{exact: true}, posterior.Spread{SD: r}},
		{"walk/displays", walk, posterior.Bias{}, kind{displayed: true}, posterior.Spread{SD: r}},
		{"slow-walk/displays", posterior.Motion{Form: posterior.MotionWalk, Walk: r * r / 1e5}, posterior.Bias{}, kind{displayed: true}, posterior.Spread{SD: r}},
		{"walk/outliers", walk, posterior.Bias{}, kind{exact: true, outlying: true}, outliers},
		{"walk/all", walk, posterior.Bias{}, kind{displayed: true, censored: true, exact: true}, outliers},
		{"walk/displays-bias", walk, posterior.Bias{SD: r}, kind{displayed: true}, posterior.Spread{SD: r}},
		{"reverting/displays", posterior.Motion{Form: posterior.MotionReverting, Variance: 1, Rate: 0.01}, posterior.Bias{}, kind{displayed: true}, posterior.Spread{SD: r}},
	} {
		b.Run(c.name, func(b *testing.B) {
			plain := plainNanoseconds()
			random := rand.New(rand.NewPCG(1, 2))
			g := posterior.NewGrid(c.motion, posterior.Prior{SD: 1}, c.bias)
			var readings [512]posterior.Indication
			truth := 0.3
			for i := range readings {
				// there and back, so that the readings can be repeated
				truth = 0.3 + r*math.Sin(float64(i)*math.Pi/64)
				if c.motion.Form == posterior.MotionConstant {
					truth = 0.3
				}
				readings[i] = c.kind.reading(random, truth, r, r, c.noise)
			}
			b.ReportAllocs()
			i := 0
			for b.Loop() {
				g.Advance(1)
				g.Update(readings[i&511], c.noise)
				i++
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/plain, "x-plain")
			b.ReportMetric(float64(len(g.AppendBinary(nil))), "B-held")
		})
	}
}

func BenchmarkGridAnswer(b *testing.B) {
	const r = 0.1
	noise := posterior.Spread{SD: r, OutlierProbability: 0.01, Inflation: 10}
	for _, bias := range []float64{0, r} {
		name := "known"
		if bias > 0 {
			name = "bias"
		}
		g := posterior.NewGrid(posterior.Motion{Form: posterior.MotionWalk, Walk: r * r / 4}, posterior.Prior{SD: 1}, posterior.Bias{SD: bias})
		for range 100 {
			g.Advance(1)
			g.Update(posterior.Indication{Lower: 0.25, Upper: 0.35}, noise)
		}
		p := g.Posterior()
		for _, c := range []struct {
			name string
			run  func()
		}{
			{"posterior", func() { g.Posterior() }},
			{"tail", func() { p.UpperTail(0.5) }},
			{"interval", func() { p.Interval(0.95) }},
			{"foretell", func() { g.Foretell(posterior.Exactly(0.4), noise) }},
			{"predictive", func() { g.Predictive(noise) }},
		} {
			b.Run(name+"/"+c.name, func(b *testing.B) {
				b.ReportAllocs()
				for b.Loop() {
					c.run()
				}
			})
		}
	}
}
