package modelcheck_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// Under a correct model the number of objections is a sum of independent events of small
// probabilities, nearly Poisson. excess is its normal score beyond which one run in 1000 lies.
const excess = 3.3

// eager is a law that spends as much as one may: readings an hour apart, each look has the
// highest level.
func eager(window int) modelcheck.Law {
	return modelcheck.LawOf(modelcheck.Settings{Window: window, ObjectionsPerYear: modelcheck.MaxObjectionsPerYear, FalseAlarmInterval: 500})
}

const (
	hour    = int64(3600e9)
	year    = 365.25 * 86400e9
	perTest = modelcheck.MaxLevel / modelcheck.Shares
	perLook = 3 * perTest
)

// Exact scores of correct models raise the declared number of objections by each test,
// however irregular the readings are in time.
func TestFalseObjectionsAreAsManyAsDeclared(t *testing.T) {
	rng := source(t)
	const perYear = 2 // so that no look reaches the highest level
	law := modelcheck.LawOf(modelcheck.Settings{ObjectionsPerYear: perYear})
	var tally modelcheck.Tally
	var at int64
	counts := map[modelcheck.Result]float64{}
	for range 80000 {
		pace := float64(hour) * math.Exp2(float64(rng.IntN(2)-2))
		for range modelcheck.DefaultWindow {
			at += int64(pace * rng.ExpFloat64())
			tally.Add(&law, modelcheck.ScoreAt(rng.NormFloat64()), at)
		}
		counts[tally.Result(&law)]++
	}
	want := perYear * float64(at) / year / 4
	if want < 100 {
		t.Fatalf("%v objections expected of each test are too few to tell", want)
	}
	for _, r := range []modelcheck.Result{modelcheck.IntervalsTooNarrow, modelcheck.IntervalsTooWide, modelcheck.Serial} {
		t.Logf("%v: %v times, expected %.1f", r, counts[r], want)
		within(t, r.String(), counts[r], want, excess*math.Sqrt(want))
	}
	report := tally.Report(&law)
	within(t, "raised", float64(report.Raised), 3*want, excess*math.Sqrt(3*want))
	n := float64(report.Total.Readings)
	within(t, "share in the 50 % interval", report.Total.Within50, 0.5, excess*0.5/math.Sqrt(n))
	within(t, "share in the 95 % interval", report.Total.Within95, 0.95, excess*math.Sqrt(0.95*0.05/n))
	within(t, "mean square", report.Total.MeanSquare, 1, excess*math.Sqrt(2/n))
	outlying := n * modelcheck.OutlyingProbability
	within(t, "outlying", float64(report.Outlying), outlying, excess*math.Sqrt(outlying))
}

// displayed is the score of a display of resolution d standard deviations that shows the cell
// in which z lies, if N(0, 1) was foretold.
func displayed(z, d float64) modelcheck.Score {
	lower := (math.Floor(z/d-0.3) + 0.3) * d
	return between(lower, lower+d)
}

// between is the score of a standard normal reading that is known to lie in [a, b].
func between(a, b float64) modelcheck.Score {
	return modelcheck.ScoreBetween(below(a), below(-a), below(b), below(-b))
}

// below returns P(Z < z).
func below(z float64) float64 { return math.Erfc(-z/math.Sqrt2) / 2 }

// Intervals in place of scores raise no more objections, and find no more steps, than are declared, be
// they cells of a display or ends of a range.
func TestIntervalsStayBelowTheirLevel(t *testing.T) {
	rng := source(t)
	for _, test := range []struct {
		name  string
		score func(z float64) modelcheck.Score
	}{
		{"resolution 0.5", func(z float64) modelcheck.Score { return displayed(z, 0.5) }},
		{"resolution 2", func(z float64) modelcheck.Score { return displayed(z, 2) }},
		{"resolution 5", func(z float64) modelcheck.Score { return displayed(z, 5) }},
		{"nothing seen below 0.5", func(z float64) modelcheck.Score {
			if z < 0.5 {
				return between(math.Inf(-1), 0.5)
			}
			return modelcheck.ScoreAt(z)
		}},
	} {
		law := eager(modelcheck.DefaultWindow)
		var tally modelcheck.Tally
		const windows = 3000
		for i := range int64(windows * modelcheck.DefaultWindow) {
			tally.Add(&law, test.score(rng.NormFloat64()), i*hour)
		}
		r := tally.Report(&law)
		steps := windows * modelcheck.DefaultWindow / law.Settings().FalseAlarmInterval
		t.Logf("%s: %d objections, %.0f declared; %d steps, %.0f declared; coverage %.4f, %.4f, mean square %.4f", test.name,
			r.Raised, windows*perLook, r.Steps, steps, r.Total.Within50, r.Total.Within95, r.Total.MeanSquare)
		if most := windows*perLook + excess*math.Sqrt(windows*perLook); float64(r.Raised) > most {
			t.Errorf("%s: %d objections, above %.1f", test.name, r.Raised, most)
		}
		if most := steps + excess*math.Sqrt(steps); float64(r.Steps) > most {
			t.Errorf("%s: %d steps, above %.1f", test.name, r.Steps, most)
		}
		// Shares and moments are conditional means, so they scatter less than those of scores.
		n := float64(r.Total.Readings)
		within(t, test.name+": 50 %", r.Total.Within50, 0.5, excess*0.5/math.Sqrt(n))
		within(t, test.name+": 95 %", r.Total.Within95, 0.95, excess*math.Sqrt(0.95*0.05/n))
		within(t, test.name+": mean square", r.Total.MeanSquare, 1, excess*math.Sqrt(2/n))
	}
}

// simulate counts the objections of windows from quantities made anew, each of which yields its
// scores one by one.
func simulate(windows int, law *modelcheck.Law, quantity func() (score func() modelcheck.Score)) (objections int) {
	for range windows {
		var tally modelcheck.Tally
		score := quantity()
		for i := range int64(law.Settings().Window) {
			tally.Add(law, score(), i*hour)
		}
		objections += tally.Report(law).Raised
	}
	return objections
}

// Beliefs that are right raise as many objections as are declared: a walk, and a level
// with an unknown repeatability, whose predictives are Student t.
func TestRightBeliefsAreBelieved(t *testing.T) {
	rng := source(t)
	law := eager(32)
	for _, test := range []struct {
		name     string
		windows  int
		quantity func() func() modelcheck.Score
	}{
		{"walk", 3000, func() func() modelcheck.Score { return walking(rng, 0.3, 0.3) }},
		{"learned repeatability", 3000, func() func() modelcheck.Score { return learning(rng) }},
	} {
		want := float64(test.windows) * perLook
		got := float64(simulate(test.windows, &law, test.quantity))
		t.Logf("%s: %v objections, expected %v", test.name, got, want)
		within(t, test.name, got, want, excess*math.Sqrt(want))
	}
}

// walking reads a level that makes steps of a standard deviation, with white noise 1, and
// foretells by one that makes steps of another.
func walking(rng *rand.Rand, step, declared float64) func() modelcheck.Score {
	level := 10 * rng.NormFloat64()
	f := posterior.NewFilter(posterior.Motion{Form: posterior.MotionWalk, Walk: declared * declared}, posterior.Prior{SD: 10}, posterior.SlopePrior{})
	return func() modelcheck.Score {
		y := level + rng.NormFloat64()
		next := f.Predictive(0, 1, nil, 1)
		f.Update(y, 0, 1, nil, 1)
		f.Advance(1)
		level += step * rng.NormFloat64()
		return modelcheck.ScoreOf(next.LowerTail(y), next.UpperTail(y))
	}
}

// learning reads a level that stays, of which nothing is known, with a repeatability of which
// nothing is known.
func learning(rng *rand.Rand) func() modelcheck.Score {
	level, r := 100*rng.NormFloat64(), math.Exp(3*rng.NormFloat64())
	vague, noise := posterior.Prior{Vague: true}, posterior.Noise{}
	var k posterior.Constant
	read := func() float64 { return level + r*rng.NormFloat64() }
	k.AddLearned(read())
	k.AddLearned(read())
	return func() modelcheck.Score {
		y := read()
		next := k.Predictive(vague, noise)
		k.AddLearned(y)
		return modelcheck.ScoreOf(next.LowerTail(y), next.UpperTail(y))
	}
}

// A display coarser than the repeatability, with the exact belief on a grid of levels:
// no more objections than declared.
func TestDisplayedBeliefsAreBelieved(t *testing.T) {
	rng := source(t)
	law := eager(32)
	const windows = 400
	got := float64(simulate(windows, &law, func() func() modelcheck.Score { return displaying(rng) }))
	if most := windows*perLook + excess*math.Sqrt(windows*perLook); got > most {
		t.Errorf("%v objections in %d windows, above %.1f", got, windows, most)
	}
}

// displaying reads a level from N(0, 1) with r = 0.2 and a display of resolution 0.5.
func displaying(rng *rand.Rand) func() modelcheck.Score {
	const (
		r, d   = 0.2, 0.5
		points = 200
	)
	level := rng.NormFloat64()
	var at, weight [points]float64
	for i := range at {
		at[i] = -4 + 8*(float64(i)+0.5)/points
		weight[i] = math.Exp(-at[i] * at[i] / 2)
	}
	return func() modelcheck.Score {
		a := math.Floor((level+r*rng.NormFloat64())/d) * d
		var total, low, cell, high float64
		for i, x := range at {
			l, h := below((a-x)/r), below((x-a-d)/r)
			low += weight[i] * l
			high += weight[i] * h
			total += weight[i]
			weight[i] *= 1 - l - h
			cell += weight[i]
		}
		return modelcheck.ScoreBetween(low/total, (cell+high)/total, (low+cell)/total, high/total)
	}
}

// However far off, readings at one time raise no objection: no time has passed in which a correct
// model might have raised one.
func TestNoTimeNoObjection(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	var tally modelcheck.Tally
	for range 10 * modelcheck.DefaultWindow {
		tally.Add(&law, modelcheck.ScoreAt(30), 1e18)
	}
	if r := tally.Report(&law); r.Result != modelcheck.NoObjection || r.Tests[0].Level != 0 {
		t.Errorf("%+v", r)
	}
}

// What a look may spend is in proportion to the time since the one before, up to a bound.
func TestLevelsFollowTime(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{Window: 16, ObjectionsPerYear: 0.01})
	var tally modelcheck.Tally
	at := int64(1.7e18)
	tally.Pass(at) // the clock starts at the first reading, scored or not
	for _, days := range []int64{1, 1, 100, 5, 4000} {
		at += days * 24 * hour
		for range 16 {
			tally.Add(&law, modelcheck.ScoreAt(1), at)
		}
		want := math.Min(0.01*float64(days)/365.25, modelcheck.MaxLevel) / 4
		for _, test := range tally.Report(&law).Tests {
			near(t, test.Name, test.Level, want, 1e-9)
		}
	}
}
