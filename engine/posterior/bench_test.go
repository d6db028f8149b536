package posterior_test

import (
	"testing"
	"time"

	"leadline.example/engine/posterior"
)

// bare is the update without compensation, origin or checks: the baseline.
type bare struct{ weight, mean float64 }

func (b *bare) add(y, u float64) {
	w := 1 / (u * u)
	b.weight += w
	b.mean += w / b.weight * (y - b.mean)
}

// bareNanoseconds measures the baseline in the same run.
func bareNanoseconds() float64 {
	const n = 2_000_000
	var b bare
	start := time.Now()
	for i := range n {
		b.add(float64(i&7), 0.5)
	}
	elapsed := time.Since(start)
	if b.weight == 0 {
		panic("not run")
	}
	return float64(elapsed.Nanoseconds()) / n
}

func BenchmarkUpdate(b *testing.B) {
	ys := [8]float64{0.80, 0.82, 0.79, 0.81, 0.80, 0.83, 0.78, 0.80}
	for _, c := range []struct {
		name string
		run  func() func(y float64)
	}{
		{"constant=known", func() func(float64) { k := new(posterior.Constant); return func(y float64) { k.AddKnown(y, 0.02) } }},
		{"constant=learned", func() func(float64) { k := new(posterior.Constant); return k.AddLearned }},
		{"walk", func() func(float64) {
			w := new(posterior.Walk)
			return func(y float64) { w.Predict(1e-4); w.Update(y, 0.02) }
		}},
	} {
		b.Run(c.name, func(b *testing.B) {
			baseline := bareNanoseconds()
			add := c.run()
			b.ReportAllocs()
			i := 0
			for b.Loop() {
				add(ys[i&7])
				i++
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/baseline, "x-bare")
		})
	}
}

func BenchmarkAnswer(b *testing.B) {
	k := learnedAll([]float64{0.95, 1.00, 0.93})
	guess, vague := learnedNoise(0.02, 4), vaguePrior()
	firm := posterior.Prior{Mean: 0.80, SD: 0.02}
	normal := posterior.Normal(posterior.LevelOf(0.8), 0.02)
	student, mixture := k.Posterior(vague, guess), k.Posterior(firm, guess)
	var sum float64
	for _, c := range []struct {
		name string
		run  func()
	}{
		{"normal/tail", func() { sum += normal.UpperTail(0.9) }},
		{"normal/interval", func() { lo, hi := normal.Interval(0.95); sum += lo + hi }},
		{"student/posterior", func() { sum += k.Posterior(vague, guess).Scale() }},
		{"student/tail", func() { sum += student.UpperTail(0.97) }},
		{"student/interval", func() { lo, hi := student.Interval(0.95); sum += lo + hi }},
		{"mixture/posterior", func() { sum += k.Posterior(firm, guess).Location() }},
		{"mixture/tail", func() { sum += mixture.UpperTail(0.84) }},
		{"mixture/far-tail", func() { sum += mixture.UpperTail(1.5) }},
		{"mixture/interval", func() { lo, hi := mixture.Interval(0.95); sum += lo + hi }},
		{"mixture/repeatability", func() { sum += k.Repeatability(firm, guess, 0.95).Median }},
	} {
		b.Run(c.name, func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				c.run()
			}
		})
	}
}
