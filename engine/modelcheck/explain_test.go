package modelcheck_test

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"

	"leadline.example/engine/modelcheck"
)

// denseLogLikelihood writes the covariance of all values down and integrates the level out:
// with V the covariance and i a column of ones,
//
//	ln L = -1/2 ((n-1) ln 2 pi + ln det V + ln i' V^-1 i + min over m of (y - m i)' V^-1 (y - m i)).
func denseLogLikelihood(t *testing.T, points []modelcheck.Point, walk, sd, seconds float64) float64 {
	t.Helper()
	n := len(points)
	v := mat.NewSymDense(n, nil)
	for i, p := range points {
		for j, q := range points[:i+1] {
			c := walk * (q.Seconds - points[0].Seconds)
			if sd > 0 {
				c += sd * sd * math.Exp(-(p.Seconds-q.Seconds)/seconds)
			}
			if i == j {
				c += p.Variance
			}
			v.SetSym(i, j, c)
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(v) {
		t.Fatal("the covariance isn't positive definite")
	}
	ones, y := mat.NewVecDense(n, nil), mat.NewVecDense(n, nil)
	for i, p := range points {
		ones.SetVec(i, 1)
		y.SetVec(i, p.Value-points[0].Value)
	}
	var solved mat.VecDense
	if err := chol.SolveVecTo(&solved, ones); err != nil {
		t.Fatal(err)
	}
	weight := mat.Dot(ones, &solved)
	y.AddScaledVec(y, -mat.Dot(y, &solved)/weight, ones)
	if err := chol.SolveVecTo(&solved, y); err != nil {
		t.Fatal(err)
	}
	return -(float64(n-1)*math.Log(2*math.Pi) + chol.LogDet() + math.Log(weight) + mat.Dot(y, &solved)) / 2
}

// irregular makes readings with random time steps, some of them 0, noise of unequal
// variances, a walk and correlated noise.
func irregular(t *testing.T, n int, walk, sd, seconds float64) []modelcheck.Point {
	rng := source(t)
	points := make([]modelcheck.Point, n)
	at, level, noise := 1e6, 1000.0, sd*rng.NormFloat64()
	for i := range points {
		step := 0.0
		if rng.IntN(4) > 0 {
			step = 10 * rng.ExpFloat64()
		}
		at += step
		level += math.Sqrt(walk*step) * rng.NormFloat64()
		left := math.Exp(-step / seconds)
		noise = left*noise + sd*math.Sqrt(1-left*left)*rng.NormFloat64()
		white := 0.5 + rng.Float64()
		points[i] = modelcheck.Point{Seconds: at, Value: level + noise + white*rng.NormFloat64(), Variance: white * white}
	}
	return points
}

// Each log-likelihood is that of the fitted numbers, and no other number on a grid has
// a higher one.
func TestExplanationsAgainstDenseCovariance(t *testing.T) {
	for _, test := range []struct {
		name              string
		walk, sd, seconds float64 // true
		declared          float64
	}{
		{"as declared", 0, 0, 1, 0},
		{"walk, not declared", 0.05, 0, 1, 0},
		{"walk, declared", 0.05, 0, 1, 0.05},
		{"correlated noise", 0, 1.5, 30, 0},
		{"correlated noise and a declared walk", 0.02, 2, 10, 0.02},
	} {
		points := irregular(t, 48, test.walk, test.sd, test.seconds)
		dense := func(walk, sd, seconds float64) float64 { return denseLogLikelihood(t, points, walk, sd, seconds) }
		e := modelcheck.Explain(points, test.declared, modelcheck.Learned{})
		within(t, test.name+": declared", e.Declared, dense(test.declared, 0, 1), 1e-7)
		within(t, test.name+": moving", e.Moving.LogLikelihood, dense(e.Moving.Walk, 0, 1), 1e-7)
		within(t, test.name+": correlated", e.Correlated.LogLikelihood, dense(test.declared, e.Correlated.SD, e.Correlated.Seconds), 1e-5)
		if e.Readings != len(points) {
			t.Errorf("%d readings, want %d", e.Readings, len(points))
		}
		for x := -12.0; x < 6; x += 0.25 {
			if better := dense(math.Exp(x), 0, 1); better > e.Moving.LogLikelihood+1e-5 {
				t.Errorf("%s: walk %g has %v, the fit %+v", test.name, math.Exp(x), better, e.Moving)
			}
		}
		for x := -1.0; x < 7; x += 0.5 {
			for sd := 0.02; sd < 30; sd *= 1.5 {
				if better := dense(test.declared, sd, math.Exp(x)); better > e.Correlated.LogLikelihood+1e-5 {
					t.Errorf("%s: sd %g in %g s has %v, the fit %+v", test.name, sd, math.Exp(x), better, e.Correlated)
				}
			}
		}
	}
}

// Where the truth is one of the explanations, twice the log-likelihood that its fit has above
// that of the true numbers is chi-squared in the limit, with as many degrees of freedom as
// numbers are fitted (Wilks 1938): above 10.83 and 13.82 once in 1000 runs. The wrong
// explanation is far less likely.
func TestExplanationsFindTheTruth(t *testing.T) {
	const n = 400
	points := irregular(t, n, 0.5, 0, 1)
	e := modelcheck.Explain(points, 0, modelcheck.Learned{})
	within(t, "excess of the walk over the truth", e.Moving.LogLikelihood-denseLogLikelihood(t, points, 0.5, 0, 1), 10.83/4, 10.83/4)
	if e.Declared > e.Moving.LogLikelihood-20 {
		t.Errorf("a level that stays is as likely as the true walk: %+v", e)
	}

	points = irregular(t, n, 0, 3, 40)
	e = modelcheck.Explain(points, 0, modelcheck.Learned{})
	within(t, "excess of correlated noise over the truth", e.Correlated.LogLikelihood-denseLogLikelihood(t, points, 0, 3, 40), 13.82/4, 13.82/4)
	if e.Moving.LogLikelihood > e.Correlated.LogLikelihood-3 {
		t.Errorf("a walk is as likely as the true correlated noise: %+v", e)
	}
}

// Where all readings have the same time neither account has anything to fit.
func TestExplanationsOfOneInstant(t *testing.T) {
	points := []modelcheck.Point{{5, 1, 1, 0}, {5, 2, 1, 0}, {5, 4, 2, 0}}
	e := modelcheck.Explain(points, 0.1, modelcheck.Learned{})
	want := denseLogLikelihood(t, points, 0.1, 0, 1)
	within(t, "declared", e.Declared, want, 1e-12)
	if e.Moving != (modelcheck.Moving{LogLikelihood: e.Declared, Walk: 0.1}) || e.Correlated != (modelcheck.Correlated{LogLikelihood: e.Declared}) {
		t.Errorf("%+v", e)
	}
}
