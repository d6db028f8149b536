package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// nextQuestions draws questions of few readings, which is where the next indication is
// foretold at every one.
func nextQuestions(t *testing.T, noise string, biased bool, f func(name string, q *question)) {
	random := source(t)
	for i := range (*countsCases + 3) / 4 {
		f(fmt.Sprintf("display, case %d", i), randomQuestion(random, mix{display: true}, noise, biased))
		mixed := mix{display: true, censored: true, exact: true, own: true}
		f(fmt.Sprintf("mixed, case %d", i), randomQuestion(random, mixed, noise, biased))
	}
}

func TestCountsPredictiveAgainstIntegration(t *testing.T) {
	for _, noise := range []string{"known", "learned", "floor"} {
		nextQuestions(t, noise, true, func(name string, q *question) {
			c := q.counts()
			var exact *truth
			own := q.noise.SD + q.noise.Guess + q.noise.Floor
			for _, sd := range []float64{0, own} {
				p := c.Predictive(q.prior, q.noise, q.bias, sd)
				if p.Form() == posterior.FormNone {
					continue
				}
				if exact == nil {
					exact = q.solve(points(q))
				}
				for _, z := range []float64{1e-6, 0.01, 0.3, 0.9, 0.9999} {
					x := p.Quantile(z)
					below, above := exact.next(x, sd)
					within(t, fmt.Sprintf("%s, %s, sd %v: z at %v", noise, name, sd, z), score(p.LowerTail(x), p.UpperTail(x)), score(below, above), 2e-3)
				}
			}
		})
	}
}

// TestPointsAgainstIntegration foretells after readings that points made earlier took in.
func TestPointsAgainstIntegration(t *testing.T) {
	asked, refused := 0, 0
	for _, noise := range []string{"known", "learned", "floor"} {
		nextQuestions(t, noise, false, func(name string, q *question) {
			var c posterior.Counts
			var p posterior.Points
			for _, s := range q.readings {
				for range int(s.count) {
					c.Add(s.y, s.sd, s.samples)
					p.Update(s.y, s.sd, s.samples)
					if p.Worn() {
						p = c.Points(q.prior, q.noise, q.bias)
					}
				}
			}
			sharp := c.Predictive(q.prior, q.noise, q.bias, 0)
			if sharp.Form() == posterior.FormNone {
				return
			}
			exact := q.solve(points(q))
			for z, tolerance := range map[float64]float64{1e-6: 5e-2, 1e-3: 1e-2, 0.3: 1e-2} {
				y := posterior.Indication{Lower: sharp.Quantile(z), Upper: sharp.Quantile(1 - z)}
				below, above, ok := p.Foretell(y, 0, 1)
				asked++
				if !ok {
					refused++
					continue
				}
				wantBelow, _ := exact.next(y.Lower, 0)
				_, wantAbove := exact.next(y.Upper, 0)
				near(t, fmt.Sprintf("%s, %s: below at %v", noise, name, z), below, wantBelow, tolerance)
				near(t, fmt.Sprintf("%s, %s: above at %v", noise, name, z), above, wantAbove, tolerance)
			}
		})
	}
	if refused > asked/5 {
		t.Errorf("%d of %d were refused", refused, asked)
	}
}

// shareBelow returns P(r < x) by the oracle: its weight of ln r summed on either side.
func (t *truth) shareBelow(x float64) float64 {
	part := func(lo, hi float64) float64 {
		u := truth{q: t.q, l: t.l}
		u.l.rule(lo, hi, 12)
		_, ofR := u.fill()
		var sum logSum
		for j := range ofR {
			sum.add(ofR[j] + u.l.logR[j])
		}
		return sum.value()
	}
	first, last := math.Log(t.l.r[0]), math.Log(t.l.r[len(t.l.r)-1])
	if t.q.noise.Floor > 0 {
		first = math.Log(t.q.noise.Floor)
	}
	below, above := part(first, math.Log(x)), part(math.Log(x), last)
	return 1 / (1 + math.Exp(above-below))
}

func TestCountsRepeatabilityAgainstIntegration(t *testing.T) {
	for _, noise := range []string{"learned", "floor"} {
		nextQuestions(t, noise, true, func(name string, q *question) {
			got := q.counts().Repeatability(q.prior, q.noise, q.bias, 0.95)
			if !got.HasMedian {
				return
			}
			exact := q.solve(points(q))
			within(t, noise+", "+name+": lower", exact.shareBelow(got.Lower), 0.025, 2e-4)
			within(t, noise+", "+name+": median", exact.shareBelow(got.Median), 0.5, 1e-3)
			within(t, noise+", "+name+": upper", exact.shareBelow(got.Upper), 0.975, 2e-4)
		})
	}
}

// TestPointsKnowTheirLimits: what they can't resolve they don't foretell.
func TestPointsKnowTheirLimits(t *testing.T) {
	var none posterior.Points
	if _, _, ok := none.Foretell(posterior.Exactly(1), 0.1, 1); ok || !none.Worn() {
		t.Error("no points, but ok")
	}
	var c posterior.Counts
	wide := posterior.Prior{Mean: 0, SD: 100}
	p := c.Points(wide, knownNoise(0.01), posterior.Bias{})
	if _, _, ok := p.Foretell(posterior.Exactly(1), 0, 1); ok {
		t.Error("points 0.8 apart foretold a reading of noise 0.01")
	}
	c.Add(posterior.Exactly(3), 1, 0)
	p = c.Points(vaguePrior(), knownNoise(1), posterior.Bias{})
	if p.Worn() {
		t.Error("new points are worn")
	}
	p.Update(posterior.Exactly(1e3), 0, 1)
	if !p.Worn() {
		t.Error("a reading far outside leaves points for good")
	}
	if _, _, ok := p.Foretell(posterior.Exactly(1e3), 0, 1); ok {
		t.Error("points without weight foretold")
	}
}
