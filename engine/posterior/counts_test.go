package posterior_test

import (
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

var countsCases = flag.Int("counts", 4, "random cases for each combination in the tests of counts, a quarter if r is learned")

// mix says which readings a random question has.
type mix struct{ display, censored, exact, own bool }

// score is the normal quantile of a probability given with its complement.
func score(below, above float64) float64 {
	if below < above {
		return -math.Sqrt2 * math.Erfcinv(2*below)
	}
	return math.Sqrt2 * math.Erfcinv(2*above)
}

// rounded returns what a display of resolution d says that shows the value nearest to y.
func rounded(y, d float64) posterior.Indication {
	k := math.Round(y / d)
	return posterior.Indication{Lower: (k - 0.5) * d, Upper: (k + 0.5) * d}
}

// randomQuestion draws a truth from about the prior and readings of it.
func randomQuestion(random *rand.Rand, m mix, noise string, biased bool) *question {
	d := math.Exp(3 * random.NormFloat64())
	r := d * math.Exp(random.Float64()*math.Log(150)) / 50 // r/d from 0.02 to 3
	n := int(math.Exp(random.Float64() * math.Log(1000)))
	level := d * 30 * random.NormFloat64()
	q := &question{prior: vaguePrior()}
	if random.IntN(2) == 0 {
		sd := math.Max(r, d) * math.Exp(random.NormFloat64())
		q.prior = posterior.Prior{Mean: level + sd*random.NormFloat64(), SD: sd}
	}
	eta := level
	if biased {
		q.bias = posterior.Bias{Mean: d * random.NormFloat64(), SD: math.Max(r, d) * math.Exp(1.5*random.NormFloat64())}
		eta += q.bias.Mean + q.bias.SD*random.NormFloat64()
	}
	switch noise {
	case "known":
		q.noise = knownNoise(r)
	case "learned":
		q.noise = learnedNoise(r*math.Exp(random.NormFloat64()), 1+10*random.Float64())
	case "floor":
		q.noise = learnedNoise(0, 0)
		q.noise.Floor = r * math.Exp(random.NormFloat64()-1)
		if random.IntN(2) == 0 {
			q.noise.Guess, q.noise.Worth = r, 1+5*random.Float64()
		}
	}
	limit := eta + r*random.NormFloat64()
	seen := map[said]int{}
	for range n {
		var s said
		sigma := r
		if s.samples = 1; random.IntN(4) == 0 {
			s.samples = 4
		}
		sigma = r / math.Sqrt(s.samples)
		if m.own && random.IntN(3) == 0 {
			s.sd, s.samples = 1.5*r, 0
			sigma = s.sd
		}
		y := eta + sigma*random.NormFloat64()
		switch kind := random.IntN(3); {
		case m.exact && (kind == 0 || !m.display && !m.censored):
			s.y = posterior.Exactly(math.Round(y/r*4) / 4 * r)
		case m.censored && (kind == 1 || !m.display):
			s.y = posterior.Indication{Lower: limit, Upper: math.Inf(1)}
			if y < limit {
				s.y = rounded(y, d)
				if random.IntN(3) == 0 {
					s.y = posterior.Indication{Lower: math.Inf(-1), Upper: limit}
				}
			}
		default:
			s.y = rounded(y, d)
		}
		if i, ok := seen[s]; ok {
			q.readings[i].count++
			continue
		}
		seen[s] = len(q.readings)
		s.count = 1
		q.readings = append(q.readings, s)
		s.count = 0
	}
	return q
}

func TestCountsAgainstIntegration(t *testing.T) {
	for _, noise := range []string{"known", "learned", "floor"} {
		for _, biased := range []bool{false, true} {
			for name, m := range map[string]mix{
				"display": {display: true}, "censored": {censored: true},
				"mixed": {display: true, censored: true, exact: true, own: true},
			} {
				t.Run(fmt.Sprintf("%s/%s/bias=%v", name, noise, biased), func(t *testing.T) {
					random, cases := source(t), *countsCases
					if noise != "known" {
						cases = (cases + 3) / 4
					}
					for i := range cases {
						q := randomQuestion(random, m, noise, biased)
						checkQuestion(t, fmt.Sprintf("case %d", i), q)
					}
				})
			}
		}
	}
}

// points returns how many points of eta and panels of ln r the oracle needs: a density
// that a display or a limit cuts out of something wide has edges as wide as r.
func points(q *question) (eta, panels int) {
	wide, r := q.prior.SD, q.noise.SD+q.noise.Guess+q.noise.Floor
	for _, s := range q.readings {
		if w := s.y.Upper - s.y.Lower; !math.IsInf(w, 0) {
			wide = math.Max(wide, w)
		}
	}
	return 1201 + 2*int(math.Min(2400, 60*wide/r)), 12
}

// checkQuestion holds a posterior against the oracle.
func checkQuestion(t *testing.T, name string, q *question) {
	t.Helper()
	p := q.counts().Posterior(q.prior, q.noise, q.bias)
	if p.Form() == posterior.FormNone {
		return
	}
	exact := q.solve(points(q))
	mean, sd, wide := exact.moments()
	gotMean, hasMean := p.Mean()
	gotSD, hasSD := p.StandardDeviation()
	bad := hasMean && hasSD && !(math.Abs(gotMean-mean) < 1e-3*sd)
	bad = bad || hasSD && wide && !(math.Abs(gotSD/sd-1) < 1e-3)
	worst, at := 0.0, 0.0
	for k := 0; k < exact.l.n; k += exact.l.n / 60 * 2 {
		x, below, above := exact.tails(k)
		if math.Min(below, above) < 1e-9 {
			continue
		}
		dz := score(p.LowerTail(x), p.UpperTail(x)) - score(below, above)
		if !(math.Abs(dz) <= math.Abs(worst)) {
			worst, at = dz, x
		}
	}
	if bad || !(math.Abs(worst) < 1e-3) {
		t.Errorf("%s: z off by %.2g at %v, mean %v want %v, sd %v (%v) want %v\n%+v", name, worst, at, gotMean, mean, gotSD, hasSD, sd, q)
	}
}
