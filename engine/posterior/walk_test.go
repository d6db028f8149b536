package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// checkFilter compares one step with its printed mean and variance.
func checkFilter(t *testing.T, name string, w *posterior.Walk, mean, variance string) {
	t.Helper()
	p := w.Posterior()
	m, _ := p.Mean()
	s, _ := p.StandardDeviation()
	near(t, name+" mean", m, number(t, mean), 4e-12)
	near(t, name+" variance", s*s, number(t, variance), 4e-12)
}

// Durbin & Koopman (2012), 2.2.5 and 2.9, with variances 15099 and 1469.1; the
// tables hold 12 or 13 digits.
func TestNileFilter(t *testing.T) {
	const noise, drift = 15099, 1469.1
	for _, c := range []struct {
		name, file string
		start      posterior.Prior
	}{
		{"from N(0, 1e7)", "published/nile_filter_a0_P1e7.csv", posterior.Prior{SD: math.Sqrt(1e7)}},
		{"from nothing", "published/nile_filter_diffuse.csv", vaguePrior()},
	} {
		w := posterior.NewWalk(c.start)
		for i, row := range table(t, c.file) {
			if i > 0 {
				w.Predict(drift)
			}
			name := fmt.Sprintf("%s, %s", c.name, row[1])
			if row[3] != "" {
				checkFilter(t, name+" before", &w, row[3], row[4])
				next := w.Predictive(math.Sqrt(noise))
				s, _ := next.StandardDeviation()
				near(t, name+" F", s*s, number(t, row[6]), 2e-12)
			} else if w.Predictive(1).Form() != posterior.FormNone || w.Posterior().Form() != posterior.FormNone {
				t.Errorf("%s: a belief before any reading", name)
			}
			w.Update(number(t, row[2]), math.Sqrt(noise))
			checkFilter(t, name, &w, row[8], row[9])
		}
		mean, _ := w.Posterior().Mean()
		sd, _ := w.Posterior().StandardDeviation()
		prints(t, "level of 1970", mean, "798.37") // Durbin & Koopman, from memory
		prints(t, "its variance", sd*sd, "4032.158")
	}
}

// West & Harrison (1997), table 2.1, and 2.3.2 for the limit.
func TestKuritFilter(t *testing.T) {
	w := posterior.NewWalk(posterior.Prior{Mean: 130, SD: 20})
	for _, row := range table(t, "published/kurit.csv") {
		w.Predict(5)
		s, _ := w.Predictive(10).StandardDeviation()
		near(t, "Q at "+row[0], s*s, number(t, row[2]), 1e-11)
		w.Update(number(t, row[1]), 10)
		checkFilter(t, "t = "+row[0], &w, row[6], row[7])
	}
	for range 200 {
		w.Predict(5)
		w.Update(143, 10)
	}
	s, _ := w.Posterior().StandardDeviation()
	near(t, "limit of C at W/V = 0.05", s*s, 20, 1e-12)
	one := posterior.Walk{}
	for range 200 {
		one.Predict(1)
		one.Update(0, 1)
	}
	s, _ = one.Posterior().StandardDeviation()
	near(t, "limit of C at W/V = 1", s*s, (math.Sqrt(5)-1)/2, 1e-12)
}

func TestWalkWithoutStepsIsConstant(t *testing.T) {
	random := source(t)
	prior := posterior.Prior{Mean: 2, SD: 0.3}
	w := posterior.NewWalk(prior)
	var k posterior.Constant
	for range 1000 {
		y, u := 2+random.NormFloat64(), math.Exp(random.NormFloat64())
		w.Update(y, u)
		k.AddKnown(y, u)
	}
	p, q := w.Posterior(), k.Posterior(prior, absentNoise())
	wm, _ := p.Mean()
	km, _ := q.Mean()
	ws, _ := p.StandardDeviation()
	ks, _ := q.StandardDeviation()
	within(t, "mean", wm, km, 1e-12*ks)
	near(t, "sd", ws, ks, 1e-12)
}

func TestSilenceNeverNarrowsAWalk(t *testing.T) {
	random := source(t)
	for range 2000 {
		w := posterior.NewWalk(posterior.Prior{Mean: random.NormFloat64(), SD: math.Exp(20 * random.NormFloat64())})
		w.Update(random.NormFloat64(), math.Exp(5*random.NormFloat64()))
		before, _ := w.Posterior().StandardDeviation()
		mean, _ := w.Posterior().Mean()
		w.Predict(math.Exp(40 * random.NormFloat64()))
		after, _ := w.Posterior().StandardDeviation()
		same, _ := w.Posterior().Mean()
		if !(after >= before) || same != mean {
			t.Fatalf("silence took sd %v to %v and mean %v to %v", before, after, mean, same)
		}
	}
}

// At the ends of the permitted range nothing overflows or vanishes.
func TestWalkAtTheEndsOfTheRange(t *testing.T) {
	for _, c := range []struct{ sd, y, u, mean, want float64 }{
		{1e100, 1e100, 1e100, 5e99, 1e100 / math.Sqrt2},
		{1e-100, 1e-100, 1e-100, 5e-101, 1e-100 / math.Sqrt2},
		{1e-100, 1e100, 1e100, 0, 1e-100},
		{1e100, 1e50, 1e-100, 1e50, 1e-100},
		{1e100, 0, 1e-100, 0, 1e-100},
	} {
		w := posterior.NewWalk(posterior.Prior{SD: c.sd})
		w.Update(c.y, c.u)
		mean, _ := w.Posterior().Mean()
		sd, _ := w.Posterior().StandardDeviation()
		within(t, "mean", mean, c.mean, 1e-14*math.Abs(c.mean)+1e-12*sd)
		near(t, "sd", sd, c.want, 1e-14)
	}
}
