package modelcheck_test

import (
	"math"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// The wrong models below are held by the default law, read every hour. What a test finds
// is compared with its power, computed apart.

// chiSquaredAbove returns P(X > x) for chi-squared X with an even number n of degrees of
// freedom: that a Poisson number of mean x/2 is below n/2 (DLMF 8.4.10).
func chiSquaredAbove(n int, x float64) float64 {
	term, sum := math.Exp(-x/2), 0.0
	for j := range n / 2 {
		sum += term
		term *= x / 2 / float64(j+1)
	}
	return sum
}

// noncentralAbove is the same where the normal scores have means whose squares sum to
// lambda: a Poisson mixture over degrees of freedom (Johnson, Kotz & Balakrishnan 1995, 29.3).
func noncentralAbove(n int, x, lambda float64) float64 {
	term, sum := math.Exp(-lambda/2), 0.0
	for j := range 2000 {
		sum += term * chiSquaredAbove(n+2*j, x)
		term *= lambda / 2 / float64(j+1)
	}
	return sum
}

// root bisects a falling function for where it is want.
func root(lo, hi, want float64, f func(float64) float64) float64 {
	for range 60 {
		if mid := (lo + hi) / 2; f(mid) > want {
			lo = mid
		} else {
			hi = mid
		}
	}
	return lo
}

// imhof returns P(z' m z > 0) for standard normal z by Imhof's integral (Biometrika 1961), in ln u.
func imhof(t *testing.T, m *mat.SymDense) float64 {
	t.Helper()
	var eigen mat.EigenSym
	if !eigen.Factorize(m, false) {
		t.Fatal("no eigenvalues")
	}
	a := eigen.Values(nil)
	const step = 1.0 / 128
	sum := 0.0
	for x := -45.0; x < 25; x += step {
		u, angle, logRho := math.Exp(x), 0.0, 0.0
		for _, v := range a {
			angle += math.Atan(v*u) / 2
			logRho += math.Log1p(v*v*u*u) / 4
		}
		sum += math.Sin(angle) * math.Exp(-logRho)
	}
	return 0.5 + step*sum/math.Pi
}

// serialAbove returns P(sum z_k z_(k+1) > r sum z_k^2) for normal z = b e with e standard normal.
func serialAbove(t *testing.T, b *mat.Dense, r float64) float64 {
	t.Helper()
	n, _ := b.Dims()
	form := mat.NewDense(n, n, nil)
	for i := range n {
		form.Set(i, i, -r)
		if i > 0 {
			form.Set(i, i-1, 0.5)
			form.Set(i-1, i, 0.5)
		}
	}
	var full mat.Dense
	full.Product(b.T(), form, b)
	_, c := full.Dims()
	symmetric := mat.NewSymDense(c, nil)
	for i := range c {
		for j := range i + 1 {
			symmetric.SetSym(i, j, (full.At(i, j)+full.At(j, i))/2)
		}
	}
	return imhof(t, symmetric)
}

// independent makes b = 1: independent scores.
func independent(n int) *mat.Dense {
	one := mat.NewDense(n, n, nil)
	for i := range n {
		one.Set(i, i, 1)
	}
	return one
}

// testLevel is the level of each test of a window of so many hours under the default law.
func testLevel(hours float64) float64 {
	return modelcheck.DefaultObjectionsPerYear / 4 * hours / (365.25 * 24)
}

// steady believes in a level that stays, of which nothing is known, and in noise of standard deviation
// 1; reading is what it then reads. It returns the objections of the first window.
func steady(law *modelcheck.Law, reading func(i int) float64) []modelcheck.Result {
	f := posterior.NewFilter(posterior.Motion{}, posterior.Prior{Vague: true}, posterior.SlopePrior{})
	var tally modelcheck.Tally
	tally.Pass(0)
	f.Update(reading(0), 0, 1, nil, 1)
	for i := 1; i <= law.Settings().Window; i++ {
		y := reading(i)
		next := f.Predictive(0, 1, nil, 1)
		f.Update(y, 0, 1, nil, 1)
		tally.Add(law, modelcheck.ScoreOf(next.LowerTail(y), next.UpperTail(y)), int64(i)*hour)
	}
	return tally.Report(law).Objections
}

// found counts in how many of n windows a result is among the objections, and in how many there are
// any.
func found(n int, want modelcheck.Result, window func() []modelcheck.Result) (wanted, any float64) {
	for range n {
		all := window()
		if slices.Contains(all, want) {
			wanted++
		}
		if len(all) > 0 {
			any++
		}
	}
	return wanted / float64(n), any / float64(n)
}

// compare complains unless a share of n agrees with a probability.
func compare(t *testing.T, name string, share, p float64, n int) {
	t.Helper()
	t.Logf("%s: found in %.4f, power %.4f", name, share, p)
	// One more for the tail, where the number isn't nearly normal.
	within(t, name, share, p, excess*math.Sqrt(p*(1-p)/float64(n))+1/float64(n))
}

// The scores of a level that stays are N(0, 4) where r is understated by 2.
func TestPowerAgainstUnderstatedRepeatability(t *testing.T) {
	rng := source(t)
	const windows = 1000
	for _, n := range []int{16, 32, 64} {
		law := modelcheck.LawOf(modelcheck.Settings{Window: n})
		threshold := root(0, 1000, testLevel(float64(n)), func(x float64) float64 { return chiSquaredAbove(n, x) })
		share, _ := found(windows, modelcheck.IntervalsTooNarrow, func() []modelcheck.Result {
			return steady(&law, func(int) float64 { return 2 * rng.NormFloat64() })
		})
		compare(t, "r understated by 2", share, chiSquaredAbove(n, threshold/4), windows)
	}
}

// Where the level drifts by b between readings, reading i (from 0) is off the mean of those before
// by b (i + 1) / 2, with standard deviation sqrt(1 + 1/i): independent scores with these means.
func TestPowerAgainstIgnoredDrift(t *testing.T) {
	rng := source(t)
	const windows, n = 1000, modelcheck.DefaultWindow
	law := modelcheck.LawOf(modelcheck.Settings{})
	threshold := root(0, 1000, testLevel(n), func(x float64) float64 { return chiSquaredAbove(n, x) })
	for _, drift := range []float64{0.05, 0.065, 0.1} {
		lambda := 0.0
		for i := 1.0; i <= n; i++ {
			lambda += drift * drift * (i + 1) * (i + 1) / 4 / (1 + 1/i)
		}
		share, any := found(windows, modelcheck.IntervalsTooNarrow, func() []modelcheck.Result {
			return steady(&law, func(i int) float64 { return drift*float64(i) + rng.NormFloat64() })
		})
		compare(t, "drift ignored", share, noncentralAbove(n, threshold, lambda), windows)
		t.Logf("drift of %v r a reading: an objection in %.4f", drift, any)
		if drift == 0.1 && any < 0.99 {
			t.Errorf("a drift of 6 r in a window is found in %v only", any)
		}
	}
}

// autoregressive returns n readings of a noise of variance 1, of which neighbours are
// correlated, in terms of as many independent numbers.
func autoregressive(n int, left float64) *mat.Dense {
	noise := mat.NewDense(n, n, nil)
	for i := range n {
		fresh := math.Sqrt(1 - left*left)
		if i == 0 {
			fresh = 1
		}
		for j := range i {
			noise.Set(i, j, left*noise.At(i-1, j))
		}
		noise.Set(i, i, fresh)
	}
	return noise
}

// steadyScores returns the scores of n + 1 readings by steady in terms of these: of each from the
// second on how far it is off the mean of those before.
func steadyScores(n int) *mat.Dense {
	scores := mat.NewDense(n, n+1, nil)
	for i := 1; i <= n; i++ {
		sd := math.Sqrt(1 + 1/float64(i))
		for j := range i {
			scores.Set(i-1, j, -1/float64(i)/sd)
		}
		scores.Set(i-1, i, 1/sd)
	}
	return scores
}

// Scores of a level that stays are linear in the readings, so their serial correlation is a ratio of
// forms in the white noise from which correlated noise is made.
func TestPowerAgainstIgnoredCorrelation(t *testing.T) {
	rng := source(t)
	const windows, n = 1000, modelcheck.DefaultWindow
	law := modelcheck.LawOf(modelcheck.Settings{})
	threshold := root(0, 1, testLevel(n), func(r float64) float64 { return modelcheck.SerialProbability(n, r) })
	for _, left := range []float64{0.6, 0.75, 0.9} {
		var b mat.Dense
		b.Mul(steadyScores(n), autoregressive(n+1, left))
		share, any := found(windows, modelcheck.Serial, func() []modelcheck.Result {
			e := rng.NormFloat64()
			return steady(&law, func(int) float64 {
				now := e
				e = left*e + math.Sqrt(1-left*left)*rng.NormFloat64()
				return now
			})
		})
		compare(t, "correlated noise ignored", share, serialAbove(t, &b, threshold), windows)
		t.Logf("correlation %v of successive readings: an objection in %.4f", left, any)
	}
}
