package posterior_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// firstExits draws paths in fine steps and returns the relative frequencies of
// having crossed by each of the times horizon / checks, 2 horizon / checks, ....
// Between two points a path of diffusion q (variance a second) crosses a limit at
// distances a and b with probability exp(-2 a b / (q h)), which removes the bias of
// looking at points only. It shares nothing with the package.
func firstExits(random *rand.Rand, c posterior.Course, l posterior.Limits, horizon float64, paths, steps, checks int) []posterior.Crossing {
	out := make([]posterior.Crossing, checks)
	for range paths {
		when, above := simulatePath(random, c, l, horizon/float64(steps), steps)
		for i := range out {
			if when > steps*(i+1)/checks {
				continue
			}
			out[i].Either += 1 / float64(paths)
			if above {
				out[i].Above += 1 / float64(paths)
			} else {
				out[i].Below += 1 / float64(paths)
			}
		}
	}
	return out
}

// simulatePath returns the step in which the path crosses first, steps + 1 if in
// none.
func simulatePath(random *rand.Rand, c posterior.Course, l posterior.Limits, h float64, steps int) (when int, above bool) {
	m := c.Motion
	z := random.NormFloat64()
	x := c.Mean + c.SD*z
	v := c.Slope + c.SlopeSD*(c.Correlation*z+math.Sqrt(1-c.Correlation*c.Correlation)*random.NormFloat64())
	diffusion, decay := m.Walk, 0.0
	if m.Form == posterior.MotionReverting {
		diffusion, decay = 2*m.Variance*m.Rate, m.Rate
	}
	if l.HasUpper && x > l.Upper || l.HasLower && x < l.Lower {
		return 0, l.HasUpper && x > l.Upper
	}
	for i := 1; i <= steps; i++ {
		before := x
		if decay > 0 {
			left := math.Exp(-decay * h)
			x = m.Mean + (x-m.Mean)*left + math.Sqrt(m.Variance*(1-left*left))*random.NormFloat64()
		} else {
			x += v*h + math.Sqrt(diffusion*h)*random.NormFloat64()
		}
		if m.Wander > 0 {
			dv := math.Sqrt(m.Wander*h) * random.NormFloat64()
			x += dv * h / 2
			v += dv
		}
		if l.HasUpper && bridged(random, l.Upper-before, l.Upper-x, diffusion*h) {
			return i, true
		}
		if l.HasLower && bridged(random, before-l.Lower, x-l.Lower, diffusion*h) {
			return i, false
		}
	}
	return steps + 1, false
}

func bridged(random *rand.Rand, a, b, variance float64) bool {
	return b < 0 || variance > 0 && random.Float64() < math.Exp(-2*a*b/variance)
}

func TestPassagesAgainstSimulation(t *testing.T) {
	random := source(t)
	const paths, steps, checks = 20_000, 240, 4
	for _, f := range passageForms {
		t.Run(f.name, func(t *testing.T) {
			for k := range 4 {
				c, l, horizon := randomPassage(random, f.form, f.wander)
				if k == 3 {
					l = upTo(l.Upper)
				}
				p := passage(t, c, l, horizon)
				for i, want := range firstExits(random, c, l, horizon, paths, steps, checks) {
					s := horizon * float64(i+1) / checks
					got := p.By(s)
					agreeing(t, fmt.Sprintf("below by %g", s), got.Below, want.Below, paths, f.error)
					agreeing(t, fmt.Sprintf("above by %g", s), got.Above, want.Above, paths, f.error)
					agreeing(t, fmt.Sprintf("either by %g", s), got.Either, want.Either, paths, f.error)
				}
			}
		})
	}
}

// agreeing allows four standard errors of the frequency, and the method's own.
func agreeing(t *testing.T, what string, got, frequency float64, paths int, own float64) {
	t.Helper()
	se := math.Sqrt(got*(1-got)/float64(paths)) + 1/float64(paths)
	within(t, what, got, frequency, 4*se+own)
}

func BenchmarkPassage(b *testing.B) {
	c := posterior.Course{SD: 0.5, Slope: 0.1, SlopeSD: 0.1, Correlation: 0.5, Motion: trend(0.04, 0)}
	walk := posterior.Course{SD: 0.5, Motion: posterior.Motion{Form: posterior.MotionWalk, Walk: 0.04}}
	for _, f := range []struct {
		name   string
		course posterior.Course
		limits posterior.Limits
	}{{"walk/one", walk, upTo(1)}, {"walk/two", walk, amid(-1, 1)}, {"trend/one", c, upTo(1)}, {"trend/two", c, amid(-1, 1)}} {
		p := passage(b, f.course, f.limits, 1000)
		b.Run("by/"+f.name, func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				p.By(20)
			}
		})
	}
	c.Motion.Wander = 1e-3
	reverting := posterior.Course{SD: 0.5, Motion: posterior.Motion{Form: posterior.MotionReverting, Variance: 0.3, Rate: 0.1}}
	for name, course := range map[string]posterior.Course{"wandering": c, "reverting": reverting} {
		b.Run("new/"+name, func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				passage(b, course, amid(-1, 1), 20)
			}
		})
	}
}
