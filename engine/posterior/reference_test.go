package posterior_test

import (
	"fmt"
	"math"
	"strings"
	"testing"

	"leadline.example/engine/posterior"
)

// The tables of testdata/reference are made by posterior.py there, with mpmath
// and 30 digits.

func TestNormalTailsAgainstReference(t *testing.T) {
	for _, row := range table(t, "reference/normal.csv") {
		mean, sd, x := number(t, row[0]), number(t, row[1]), number(t, row[2])
		p := posterior.Normal(posterior.LevelOf(mean), sd)
		name := fmt.Sprintf("N(%g, %g) at %v", mean, sd, x)
		near(t, name+" upper", p.UpperTail(x), number(t, row[3]), 1e-14)
		near(t, name+" lower", p.LowerTail(x), number(t, row[4]), 1e-14)
	}
}

func TestStudentTailsAgainstReference(t *testing.T) {
	for _, row := range table(t, "reference/student.csv") {
		dof, x, want := number(t, row[0]), number(t, row[1]), number(t, row[2])
		p := posterior.Student(posterior.Level{}, 1, dof)
		name := fmt.Sprintf("t_%g at %v", dof, x)
		near(t, name+" upper", p.UpperTail(x), want, 1e-12)
		near(t, name+" lower", p.LowerTail(-x), want, 1e-12)
		// The quantile of the tail is x: to the digits of the tail, which has
		// the relative condition x f / P with respect to x.
		near(t, fmt.Sprintf("t_%g quantile of %v", dof, want), p.Quantile(want), -x, 1e-11)
	}
}

// mixtureCase is an entry of mixture.json.
type mixtureCase struct {
	Name         string
	Prior        []float64
	Worth, Guess float64
	Known        [][2]float64
	Readings     [][2]float64 // value, how often
	MeanOffset   string       `json:"mean_offset_from_first"`
	SD           string
	Tails        []mixtureTail
	RBelow       []struct {
		R           float64
		Probability string
	} `json:"r_below"`
}

type mixtureTail struct {
	X         float64
	Upper     string
	Lower     string
	NextUpper string `json:"next_upper"`
	NextLower string `json:"next_lower"`
}

// build returns what the case declares and read.
func (c mixtureCase) build() (*posterior.Constant, posterior.Prior, posterior.Noise) {
	var k posterior.Constant
	for _, r := range c.Known {
		k.AddKnown(r[0], r[1])
	}
	for _, r := range c.Readings {
		for range int(r[1]) {
			k.AddLearned(r[0])
		}
	}
	prior := vaguePrior()
	if len(c.Prior) == 2 {
		prior = posterior.Prior{Mean: c.Prior[0], SD: c.Prior[1]}
	}
	return &k, prior, learnedNoise(c.Guess, c.Worth)
}

func mixtureCases(t testing.TB) []mixtureCase {
	var cases []mixtureCase
	load(t, "reference/mixture.json", &cases)
	return cases
}

func TestMixturesAgainstReference(t *testing.T) {
	for _, c := range mixtureCases(t) {
		t.Run(c.Name, func(t *testing.T) {
			k, prior, noise := c.build()
			level, next := k.Posterior(prior, noise), k.Predictive(prior, noise)
			if len(c.Readings) > 0 {
				mean, _ := level.Mean()
				sd, _ := level.StandardDeviation()
				near(t, "sd", sd, number(t, c.SD), 1e-12)
				ulp := math.Abs(mean) * 0x1p-52
				within(t, "mean less the first point", mean-c.Tails[0].X, number(t, c.MeanOffset), 1e-12*sd+ulp)
			}
			for _, p := range c.Tails {
				at := fmt.Sprintf(" at %v", p.X)
				near(t, "upper"+at, level.UpperTail(p.X), number(t, p.Upper), 1e-10)
				near(t, "lower"+at, level.LowerTail(p.X), number(t, p.Lower), 1e-10)
				near(t, "next upper"+at, next.UpperTail(p.X), number(t, p.NextUpper), 1e-10)
				near(t, "next lower"+at, next.LowerTail(p.X), number(t, p.NextLower), 1e-10)
			}
		})
	}
}

// The distribution function of r is known at the points of r_below; the interval
// whose upper tail it is must end there.
func TestRepeatabilityAgainstReference(t *testing.T) {
	for _, c := range mixtureCases(t) {
		k, prior, noise := c.build()
		for _, b := range c.RBelow {
			p := number(t, b.Probability)
			if p < 1e-3 || p > 1-1e-3 {
				continue // 1 - p is not known to enough digits here
			}
			coverage := math.Abs(2*p - 1)
			r := k.Repeatability(prior, noise, coverage)
			got := r.Upper
			if p < 0.5 {
				got = r.Lower
			}
			if !r.HasMedian {
				t.Errorf("%s: no interval for r", c.Name)
			}
			near(t, fmt.Sprintf("%s: quantile %v of r", c.Name, p), got, b.R, 1e-11)
		}
	}
}

// The standard deviation of the next indication where it barely exists: the
// predictive has worth + n degrees of freedom or so, and none from 2 down.
func TestSecondMomentsAgainstReference(t *testing.T) {
	for _, row := range table(t, "reference/moments.csv") {
		var k posterior.Constant
		for _, y := range strings.Fields(row[4]) {
			k.AddLearned(number(t, y))
		}
		prior := posterior.Prior{Mean: number(t, row[0]), SD: number(t, row[1])}
		noise := learnedNoise(number(t, row[2]), number(t, row[3]))
		level, levelOK := k.Posterior(prior, noise).StandardDeviation()
		next, nextOK := k.Predictive(prior, noise).StandardDeviation()
		if !levelOK || !nextOK {
			t.Errorf("%v: standard deviations exist: level %v, next %v", row[:5], levelOK, nextOK)
		}
		near(t, fmt.Sprint("level, ", row[:5]), level, number(t, row[5]), 1e-11)
		near(t, fmt.Sprint("next, ", row[:5]), next, number(t, row[6]), 1e-11)
	}
	// Worth 1 and one reading: two degrees of freedom, no second moment.
	k := learnedAll([]float64{1})
	if _, ok := k.Predictive(posterior.Prior{SD: 1}, learnedNoise(0.02, 1)).StandardDeviation(); ok {
		t.Error("a second moment at two degrees of freedom")
	}
}
