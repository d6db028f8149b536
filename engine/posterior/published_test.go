package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// learnedAll returns the readings as such that inform r.
func learnedAll(ys []float64) *posterior.Constant {
	var c posterior.Constant
	for _, y := range ys {
		c.AddLearned(y)
	}
	return &c
}

// digits is the log relative error of McCullough (1998), The American
// Statistician 52, 358-366: how many digits agree, 15 at most here.
func digits(got, want float64) float64 {
	if got == want {
		return 15
	}
	return math.Min(15, -math.Log10(math.Abs(got-want)/math.Abs(want)))
}

func TestStRDMeanAndStandardDeviation(t *testing.T) {
	// Certified for the decimal data. The readings as doubles carry an error of
	// half a unit in their last place u each, which alone leaves about
	// log10(sd / u) digits of the standard deviation: 9.6 for NumAcc3, 8.3 for NumAcc4.
	for _, c := range []struct {
		name, file     string
		mean, sd       float64
		meanLRE, sdLRE float64
	}{
		{"Lottery", "lottery", 518.958715596330, 291.699727470969, 14.5, 14.5},
		{"Lew", "lew", -177.435000000000, 277.332168044316, 14.5, 14.5},
		{"Mavro", "mavro", 2.00185600000000, 0.000429123454003053, 14.5, 12.5},
		{"Michelso", "michelso", 299.852400000000, 0.0790105478190518, 14.5, 13.5},
		{"PiDigits", "pidigits", 4.53480000000000, 2.86733906028871, 14.5, 14.5},
		{"NumAcc1", "numacc1", 10000002, 1, 15, 15},
		{"NumAcc2", "numacc2", 1.2, 0.1, 14.5, 14.5},
		{"NumAcc3", "numacc3", 1000000.2, 0.1, 14.5, 9.4},
		{"NumAcc4", "numacc4", 10000000.2, 0.1, 14.5, 8.2},
	} {
		k := learnedAll(column(t, "published/strd_"+c.file+".csv", 0))
		mean, _ := k.Posterior(vaguePrior(), learnedNoise(0, 0)).Mean()
		r := k.Repeatability(vaguePrior(), learnedNoise(0, 0), 0.95)
		got := [2]float64{digits(mean, c.mean), digits(r.Estimate, c.sd)}
		t.Logf("%-8s mean %.17g LRE %.1f, sd %.17g LRE %.1f", c.name, mean, got[0], r.Estimate, got[1])
		if !(got[0] >= c.meanLRE) || !(got[1] >= c.sdLRE) {
			t.Errorf("%s: %.1f and %.1f digits, want %.1f and %.1f", c.name, got[0], got[1], c.meanLRE, c.sdLRE)
		}
	}
}

func TestVagueConstantIsStudent(t *testing.T) {
	for _, c := range []struct {
		name, source string
		ys           []float64
		dof          float64
		mean, lo, hi float64
		u            float64 // standard deviation of the distribution
	}{
		{
			name:   "temperatures",
			source: "JCGM 100:2008, 4.4.3 (mean 100.145, s/sqrt n 0.333); JCGM 101:2008, 6.4.9.4; recomputed with mpmath, 12 digits",
			ys: []float64{96.9, 98.18, 98.25, 98.61, 99.03, 99.49, 99.56, 99.74, 99.89, 100.07,
				100.33, 100.42, 100.68, 100.95, 101.11, 101.2, 101.57, 101.84, 102.36, 102.72},
			dof: 19, mean: 100.145, lo: 99.448199333, hi: 100.841800667, u: 0.351954626086,
		},
		{
			name:   "Newcomb",
			source: "Gelman et al. (2013), 3.2 (26.2, [23.6, 28.8] in print); recomputed with mpmath, 12 digits",
			ys:     column(t, "published/newcomb.csv", 0),
			dof:    65, mean: 26.2121212121, lo: 23.5705906838, hi: 28.8536517405,
			u: 10.7453247816 / math.Sqrt(66) * math.Sqrt(65.0/63),
		},
		{
			name:   "Michelson",
			source: "StRD Michelso, scaled: mean 852.4, s 79.0105478190518; t_99(0.975) = 1.98421695150864 (R 4.2.2 qt, from memory)",
			ys:     column(t, "published/morley.csv", 2),
			dof:    99, mean: 852.4, lo: 852.4 - 1.98421695150864*7.90105478190518, hi: 852.4 + 1.98421695150864*7.90105478190518,
			u: 7.90105478190518 * math.Sqrt(99.0/97),
		},
	} {
		p := learnedAll(c.ys).Posterior(vaguePrior(), learnedNoise(0, 0))
		if p.Form() != posterior.FormStudent || p.DegreesOfFreedom() != c.dof {
			t.Fatalf("%s: %v with %v degrees of freedom", c.name, p.Form(), p.DegreesOfFreedom())
		}
		mean, _ := p.Mean()
		sd, _ := p.StandardDeviation()
		lo, hi := p.Interval(0.95)
		near(t, c.name+" mean", mean, c.mean, 1e-11)
		near(t, c.name+" sd", sd, c.u, 1e-11)
		near(t, c.name+" lower", lo, c.lo, 1e-11)
		near(t, c.name+" upper", hi, c.hi, 1e-11)
		near(t, c.name+" below the interval", p.LowerTail(lo), 0.025, 1e-12)
	}
}

func TestNormalConformance(t *testing.T) {
	for _, c := range []struct {
		name, source string
		y, u         float64
		lower, upper float64
		below, above float64
		inside       float64
		printed      string
	}{
		{
			"Zener diode", "JCGM 106:2012, 7.3 example 1; mpmath, 12 digits",
			-5.47, 0.05, math.Inf(-1), -5.4, 0, 0.0807566592338, 0.919243340766, "0.92",
		},
		{
			"SAE 40 oil", "JCGM 106:2012, 7.4 example; mpmath, 12 digits",
			13.6, 1.8, 12.5, 16.3, 0.270563012236, 0.0668072012689, 0.662629786495, "0.66",
		},
	} {
		var k posterior.Constant
		k.AddKnown(c.y, c.u)
		p := k.Posterior(vaguePrior(), absentNoise())
		near(t, c.name+" below", p.LowerTail(c.lower), c.below, 1e-11)
		near(t, c.name+" above", p.UpperTail(c.upper), c.above, 1e-11)
		near(t, c.name+" conformance", p.Between(c.lower, c.upper), c.inside, 1e-11)
		prints(t, c.name+" as printed", p.Between(c.lower, c.upper), c.printed)
	}
}

func TestPriorAndReadingJoin(t *testing.T) {
	for _, c := range []struct {
		name, source string
		prior        posterior.Prior
		ys           []float64
		r            float64
		mean, sd     float64
		next         float64
	}{
		{
			"resistor", "JCGM 106:2012, (A.13), (A.14); mpmath, 12 digits",
			posterior.Prior{Mean: 1500, SD: 0.12}, []float64{1500.18}, 0.04, 1500.162, 0.037947331922, math.Hypot(0.037947331922, 0.04),
		},
		{
			"physicist A", "Box & Tiao (1973), 1.2.3 (890, 17.9)",
			posterior.Prior{Mean: 900, SD: 20}, []float64{850}, 40, 890, 17.88854382, math.Hypot(17.88854382, 40),
		},
		{
			"physicist B", "Box & Tiao (1973), 1.2.3 (840, 35.78)",
			posterior.Prior{Mean: 800, SD: 80}, []float64{850}, 40, 840, 35.77708764, math.Hypot(35.77708764, 40),
		},
		{
			"physicist A after 100", "Box & Tiao (1973), 1.2.3 (871.2, 3.9); mpmath",
			posterior.Prior{Mean: 900, SD: 20}, hundredOf(870), 40, 871.153846154, 3.92232270276, math.Hypot(3.92232270276, 40),
		},
		{
			"physicist B after 100", "Box & Tiao (1973), 1.2.3 (869.8, 3.995); mpmath",
			posterior.Prior{Mean: 800, SD: 80}, hundredOf(870), 40, 869.825436409, 3.99500935551, math.Hypot(3.99500935551, 40),
		},
		{
			"three readings", "by hand: (100 + 101 + 100.5 + 101.5) / 4, 1 / sqrt 4",
			posterior.Prior{Mean: 100, SD: 1}, []float64{101, 100.5, 101.5}, 1, 100.75, 0.5, math.Sqrt(1.25),
		},
	} {
		var k, l posterior.Constant
		w := posterior.NewWalk(c.prior)
		for _, y := range c.ys {
			k.AddKnown(y, c.r)
			l.AddLearned(y)
			w.Predict(0)
			w.Update(y, c.r)
		}
		known := knownNoise(c.r)
		for name, p := range map[string]posterior.Posterior{
			"each known": k.Posterior(c.prior, known), "known afterwards": l.Posterior(c.prior, known), "walk": w.Posterior(),
		} {
			mean, _ := p.Mean()
			sd, _ := p.StandardDeviation()
			near(t, c.name+", "+name+": mean", mean, c.mean, 1e-11)
			near(t, c.name+", "+name+": sd", sd, c.sd, 1e-9)
		}
		sd, _ := k.Predictive(c.prior, known).StandardDeviation()
		near(t, c.name+": next", sd, c.next, 1e-9)
	}
}

// hundredOf returns 100 values with the given mean.
func hundredOf(mean float64) []float64 {
	var out []float64
	for i := range 50 {
		out = append(out, mean-float64(i), mean+float64(i))
	}
	return out
}

func TestNormalTables(t *testing.T) {
	n := posterior.Normal(posterior.Level{}, 1)
	for i, want := range []string{"0.841344746068543", "0.977249868051821", "0.998650101968370"} { // A&S table 26.1
		prints(t, "P", n.LowerTail(float64(i+1)), want)
	}
	// A&S tables 26.5 and 26.6; four more digits from mpmath
	for q, want := range map[float64]float64{
		0.1: 1.2815515655446, 0.05: 1.644853626951473, 0.025: 1.959963984540054, 0.01: 2.326347874040841,
		0.005: 2.575829303548901, 0.001: 3.090232306167814, 0.0005: 3.290526731491895, 0.0001: 3.719016485455681,
	} {
		near(t, "x", n.Quantile(q), -want, 1e-14)
		near(t, "x", n.Quantile(1-q), want, 1e-12)
		lo, hi := n.Interval(1 - 2*q)
		near(t, "lo", lo, -want, 1e-12)
		near(t, "hi", hi, want, 1e-12)
	}
	// Wichura (1988), AS 241
	for p, want := range map[float64]float64{0.25: -0.6744897501960817, 0.001: -3.090232306167814, 1e-20: -9.262340089798408} {
		near(t, fmt.Sprint("AS 241 at ", p), n.Quantile(p), want, 4e-16)
	}
	// JCGM 106:2012, table 1
	for p, want := range map[float64]string{0.80: "0.84", 0.90: "1.28", 0.95: "1.64", 0.99: "2.33", 0.999: "3.09"} {
		prints(t, fmt.Sprint("z for ", p), n.Quantile(p), want)
	}
	// JCGM 106:2012, A.3.1: 0.683, 0.955 (a slip: 0.9545) and 0.997; mpmath, 12 digits
	for i, want := range []float64{0.682689492137, 0.954499736104, 0.997300203937} {
		k := float64(i + 1)
		near(t, fmt.Sprint("coverage of ", k), n.Between(-k, k), want, 1e-11)
	}
}

func TestStudentTables(t *testing.T) {
	// A&S table 26.10
	t95 := []string{"12.706", "4.303", "2.571", "2.228", "2.086", "2.042", "2.000", "1.980"}
	t99 := []string{"63.657", "9.925", "4.032", "3.169", "2.845", "2.750", "2.660", "2.617"}
	for i, nu := range []float64{1, 2, 5, 10, 20, 30, 60, 120} {
		p := posterior.Student(posterior.Level{}, 1, nu)
		_, hi := p.Interval(0.95)
		prints(t, fmt.Sprintf("t_95(%v)", nu), hi, t95[i])
		_, hi = p.Interval(0.99)
		prints(t, fmt.Sprintf("t_99(%v)", nu), hi, t99[i])
	}
	// JCGM 100:2008, table G.2
	erf := func(k float64) float64 { return math.Erf(k / math.Sqrt2) }
	coverages := []float64{erf(1), 0.90, 0.95, erf(2), 0.99, erf(3)}
	count := 0
	for _, row := range table(t, "published/gum_table_g2.csv") {
		p := posterior.Normal(posterior.Level{}, 1)
		if row[0] != "oo" {
			p = posterior.Student(posterior.Level{}, 1, number(t, row[0]))
		}
		for i, coverage := range coverages {
			_, hi := p.Interval(coverage)
			if row[0] == "35" && coverage == 0.90 {
				near(t, "t_90(35), misprinted 1.70", hi, 1.68957245778, 1e-11) // mpmath
				continue
			}
			count++
			prints(t, fmt.Sprintf("t(%s) for %v", row[0], coverage), hi, row[i+1])
		}
	}
	if count != 167 {
		t.Errorf("compared %d entries of table G.2, want 167", count)
	}
}
