package posterior_test

import (
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// partOf returns what a source contributes, whatever its label.
func partOf(f *posterior.Filter, source posterior.SourceKind, state int) float64 {
	sum := 0.0
	for _, p := range f.Parts() {
		if p.Source == source && p.State == state {
			sum += p.Variance
		}
	}
	return sum
}

// JCGM 100:2008, table H.1: an end gauge compared with a standard, in nm; the
// digits after those printed by mpmath. The mean of five differences is the one reading,
// what else is uncertain are biases with their sensitivities (formula H.7).
func TestEndGaugeBudget(t *testing.T) {
	const thermal = 50.000623e6 * 11.5e-6 // nm by a kelvin's difference
	const expansion = 50.000623e6 * 0.1   // nm by 1/K, at 0.1 K from 20 degrees
	inputs := []struct {
		name           string
		u, sensitivity float64
		printed        string
	}{
		{"standard", 25, 1, "25"},
		{"comparator, random", 10 / 2.5705818356363, 1, "3.9"}, // t_95(5), table G.2: 2.57
		{"comparator, systematic", 20.0 / 3, 1, "6.7"},
		{"difference of expansion", 1e-6 / math.Sqrt(3), expansion, "2.9"},
		{"difference of temperature", 0.05 / math.Sqrt(3), thermal, "16.6"},
	}
	f := posterior.NewFilter(posterior.Motion{}, vaguePrior(), posterior.SlopePrior{})
	f.Account()
	var terms []posterior.Term
	for _, in := range inputs {
		terms = append(terms, posterior.Term{State: f.Add(posterior.Process{Variance: in.u * in.u}), Coefficient: in.sensitivity})
	}
	f.Update(215, 0, 1, terms, 13*13/5.0)
	for i, in := range inputs {
		prints(t, in.name, math.Sqrt(partOf(&f, posterior.SourceEntry, terms[i].State)), in.printed)
	}
	prints(t, "mean of the differences", math.Sqrt(partOf(&f, posterior.SourceWhite, 0)), "5.8")
	near(t, "u_c^2", f.Variance(0), 1002.2391064, 1e-9)
	prints(t, "u_c^2", f.Variance(0), "1002")
	prints(t, "u_c", f.Posterior().Scale(), "32")
}

// JCGM 100:2008, 4.4.3: the mean of twenty temperatures, s = 1.489, u = 0.333; all of it
// from the readings.
func TestMeanOfTemperaturesBudget(t *testing.T) {
	f := posterior.NewFilter(posterior.Motion{}, vaguePrior(), posterior.SlopePrior{})
	f.Account()
	for _, y := range []float64{
		96.9, 98.18, 98.25, 98.61, 99.03, 99.49, 99.56, 99.74, 99.89, 100.07,
		100.33, 100.42, 100.68, 100.95, 101.11, 101.2, 101.57, 101.84, 102.36, 102.72,
	} {
		f.Update(y, 0, 1, nil, 1.48884448306*1.48884448306)
	}
	prints(t, "mean", f.Posterior().Location(), "100.145")
	prints(t, "u", math.Sqrt(partOf(&f, posterior.SourceWhite, 0)), "0.333")
	if parts := f.Parts(); len(parts) != 1 {
		t.Errorf("parts are %+v, want one", parts)
	}
}

// What a source contributes is its variance by the square of the mean's
// sensitivity to it (JCGM 100:2008, 5.1.3). The mean being linear in the
// readings, its sensitivity to each is how far it moves if the reading moves by
// one, and that to a bias or the prior follows from what rests on them.
func TestPartsAreSquaresOfSensitivities(t *testing.T) {
	random := source(t)
	for n := range 100 {
		motion := posterior.Motion{Form: posterior.MotionForm(random.IntN(2)), Walk: random.Float64()}
		prior := posterior.Prior{SD: math.Exp(random.NormFloat64()), Vague: random.IntN(3) == 0}
		variances := []float64{math.Exp(random.NormFloat64()), math.Exp(random.NormFloat64()), math.Exp(random.NormFloat64())}
		type reading struct {
			noise, own, common float64
			redrawn            bool
		}
		all := make([]reading, 2+random.IntN(12))
		for i := range all {
			all[i] = reading{math.Exp(random.NormFloat64()), float64(random.IntN(2)), random.Float64(), random.IntN(4) == 0}
		}
		// run returns the filter after readings that are 0 but one, which is 1.
		run := func(moved int) posterior.Filter {
			f := posterior.NewFilter(motion, prior, posterior.SlopePrior{})
			f.Account()
			own, common := f.Add(posterior.Process{Variance: variances[0]}), f.Add(posterior.Process{Variance: variances[1]})
			for i, r := range all {
				f.Advance(1)
				if r.redrawn {
					f.Redraw(own, posterior.Process{Variance: variances[2]})
				}
				y := 0.0
				if i == moved {
					y = 1
				}
				f.Update(y, 0, 1, []posterior.Term{{State: own, Coefficient: r.own}, {State: common, Coefficient: r.common}}, r.noise)
			}
			return f
		}
		f := run(-1)
		white, total, ownSum, commonSum, own, life := 0.0, 0.0, 0.0, 0.0, 0.0, variances[0]
		for i, r := range all {
			moved := run(i)
			w := moved.Mean(0)
			if r.redrawn {
				own, ownSum, life = own+ownSum*ownSum*life, 0, variances[2]
			}
			white, total = white+w*w*r.noise, total+w
			ownSum, commonSum = ownSum+w*r.own, commonSum+w*r.common
		}
		own += ownSum * ownSum * life
		fromPrior := (1 - total) * (1 - total) * prior.SD * prior.SD
		if prior.Vague {
			fromPrior = 0
		}
		v := f.Variance(0)
		for name, part := range map[string][2]float64{
			"white noise": {partOf(&f, posterior.SourceWhite, 0), white}, "own bias": {partOf(&f, posterior.SourceEntry, 1), own},
			"common bias": {partOf(&f, posterior.SourceEntry, 2), commonSum * commonSum * variances[1]},
			"prior":       {partOf(&f, posterior.SourcePrior, 0), fromPrior},
			"walk":        {partOf(&f, posterior.SourceWalk, 0), v - white - own - commonSum*commonSum*variances[1] - fromPrior},
		} {
			if !(math.Abs(part[0]-part[1]) <= 1e-12*v) {
				t.Errorf("%d: %s contributes %v, want %v of %v", n, name, part[0], part[1], v)
			}
		}
	}
}
