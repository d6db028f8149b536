package posterior_test

import (
	"testing"
	"time"

	"leadline.example/engine/posterior"
)

// knownNanoseconds measures Constant.AddKnown in the same run.
func knownNanoseconds() float64 {
	const n = 2_000_000
	var k posterior.Constant
	start := time.Now()
	for i := range n {
		k.AddKnown(float64(i&7), 0.5)
	}
	elapsed := time.Since(start)
	if k.Count() != n {
		panic("not run")
	}
	return float64(elapsed.Nanoseconds()) / n
}

// displays returns Counts of n distinct displayed values, in the numbers of a normal of
// standard deviation n / 5 steps, and the intervals.
func displays(n int) (*posterior.Counts, []posterior.Indication) {
	var c posterior.Counts
	var all []posterior.Indication
	for i := range n {
		z := (float64(i) - float64(n-1)/2) / (float64(n) / 5)
		y := posterior.Indication{Lower: float64(i) - 0.5, Upper: float64(i) + 0.5}
		all = append(all, y)
		for range 1 + int(40*(1-z*z/7)) {
			c.Add(y, 0, 1)
		}
	}
	return &c, all
}

func BenchmarkCountsAdd(b *testing.B) {
	for name, n := range map[string]int{"distinct=20": 20, "distinct=1000": 1000} {
		b.Run(name, func(b *testing.B) {
			c, all := displays(n)
			baseline := knownNanoseconds()
			b.ReportAllocs()
			i := 0
			for b.Loop() {
				c.Add(all[i], 0, 1)
				if i++; i == len(all) {
					i = 0
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/baseline, "x-known")
			b.ReportMetric(float64(len(c.AppendBinary(nil))), "bytes")
		})
	}
}

// BenchmarkCountsQuery makes the posterior and asks for an interval and two tails.
func BenchmarkCountsQuery(b *testing.B) {
	bias := posterior.Bias{Mean: 0.1, SD: 0.5}
	floor := learnedNoise(0, 0)
	floor.Floor = 0.5
	for _, c := range []struct {
		name     string
		distinct int
		noise    posterior.Noise
		bias     posterior.Bias
	}{
		{"known", 20, knownNoise(4), posterior.Bias{}},
		{"known/bias", 20, knownNoise(4), bias},
		{"known/sharp", 3, knownNoise(0.1), posterior.Bias{}},
		{"known/distinct=1000", 1000, knownNoise(2), posterior.Bias{}},
		{"learned", 20, learnedNoise(4, 4), posterior.Bias{}},
		{"learned/bias", 20, learnedNoise(4, 4), bias},
		{"learned/sharp", 3, learnedNoise(0.1, 4), posterior.Bias{}},
		{"learned/floor", 20, floor, posterior.Bias{}},
		{"learned/distinct=1000", 1000, learnedNoise(200, 4), posterior.Bias{}},
	} {
		b.Run(c.name, func(b *testing.B) {
			counts, _ := displays(c.distinct)
			b.ReportAllocs()
			sum := 0.0
			for b.Loop() {
				p := counts.Posterior(vaguePrior(), c.noise, c.bias)
				lo, hi := p.Interval(0.95)
				sum += lo + hi + p.LowerTail(lo-1) + p.UpperTail(hi+1)
			}
		})
	}
}

func BenchmarkPoints(b *testing.B) {
	counts, all := displays(20)
	for name, noise := range map[string]posterior.Noise{"known": knownNoise(4), "learned": learnedNoise(4, 4)} {
		points := counts.Points(vaguePrior(), noise, posterior.Bias{})
		b.Run(name+"/foretell", func(b *testing.B) {
			sum := 0.0
			for b.Loop() {
				below, above, _ := points.Foretell(all[7], 0, 1)
				sum += below + above
			}
			b.ReportMetric(float64(len(points.AppendBinary(nil))), "bytes")
		})
		b.Run(name+"/update", func(b *testing.B) {
			p := points.Clone()
			for b.Loop() {
				p.Update(all[9], 0, 1)
			}
		})
		b.Run(name+"/make", func(b *testing.B) {
			for b.Loop() {
				counts.Points(vaguePrior(), noise, posterior.Bias{})
			}
		})
	}
}
