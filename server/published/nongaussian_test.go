package published_test

import (
	"fmt"
	"math"
	"testing"
	"time"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// plane is the posterior of a level and of ln r on points, summed up one reading after the
// other: what the service does is compared with it. Levels lie closer about centre,
//
//	mu = centre + unit sinh(u)
//
// in equal steps of u, so that both a belief after two readings and one after many fit on. Sums over
// equal steps of what vanishes at both ends converge faster than any power of the step
// (Trefethen & Weideman 2014, SIAM Review 56, 385-458, from memory).
type plane struct{ mu, r, width, logs []float64 }

// newPlane has a flat level, and a flat ln r between two values; one value is a known r.
func newPlane(centre, unit, reach float64, levels int, rs ...float64) *plane {
	p := new(plane)
	if len(rs) == 2 {
		lo, hi := math.Log(rs[0]), math.Log(rs[1])
		n := int((hi - lo) / 0.04)
		rs = nil
		for i := range n + 1 {
			rs = append(rs, math.Exp(lo+(hi-lo)*float64(i)/float64(n)))
		}
	}
	step := 2 * reach / float64(levels-1)
	for i := range levels {
		u := -reach + step*float64(i)
		for _, r := range rs {
			p.mu = append(p.mu, centre+unit*math.Sinh(u))
			p.width = append(p.width, unit*math.Cosh(u)*step)
			p.r = append(p.r, r)
			p.logs = append(p.logs, math.Log(unit*math.Cosh(u)*step))
		}
	}
	return p
}

// take multiplies by a likelihood, given by its logarithm.
func (p *plane) take(log func(mu, r float64) float64) {
	for i := range p.logs {
		p.logs[i] += log(p.mu[i], p.r[i])
	}
}

// average returns the posterior mean of a function of a point.
func (p *plane) average(f func(i int) float64) float64 {
	top, sum, all := math.Inf(-1), 0.0, 0.0
	for _, l := range p.logs {
		top = max(top, l)
	}
	for i, l := range p.logs {
		if w := math.Exp(l - top); w > 1e-30 {
			sum += w * f(i)
			all += w
		}
	}
	return sum / all
}

func (p *plane) moments() (mean, sd float64) {
	mean = p.average(func(i int) float64 { return p.mu[i] })
	return mean, math.Sqrt(p.average(func(i int) float64 { return square(p.mu[i] - mean) }))
}

// below returns P(mu < x), points being as wide as they stand apart.
func (p *plane) below(x float64) float64 {
	return p.average(func(i int) float64 { return max(0, min(1, (x-p.mu[i])/p.width[i]+0.5)) })
}

// logNormal is ln of the normal density, up to a constant.
func logNormal(y, mu, sd float64) float64 { return -square((y-mu)/sd)/2 - math.Log(sd) }

func upper(z float64) float64 { return math.Erfc(z/math.Sqrt2) / 2 }

// wantBelief holds a belief to the bounds of the table of supported combinations: mean to 1 % and
// standard deviation to 3 % of the exact one, normal quantiles to 0.03, here at the ends of its interval.
func wantBelief(t *testing.T, b *leadlinev1.Belief, p *plane) {
	t.Helper()
	mean, sd := p.moments()
	if math.Abs(b.GetMean()-mean) > 0.01*sd {
		t.Errorf("mean %v, want %v +- %v", b.GetMean(), mean, sd)
	}
	wantNear(t, "standard deviation", b.GetStandardDeviation(), sd, 0.03)
	// The normal density at the 0.025 quantile is 0.0584: 0.03 there is a probability of 0.00175.
	if q := p.below(b.GetInterval().GetLower()); math.Abs(q-0.025) > 0.00175 {
		t.Errorf("%v lies below the lower end, want 0.025", q)
	}
	if q := p.below(b.GetInterval().GetUpper()); math.Abs(q-0.975) > 0.00175 {
		t.Errorf("%v lies below the upper end, want 0.975", q)
	}
	t.Logf("mean %.5f, by integration %.5f; standard deviation %.5f, %.5f; below the ends %.5f, %.5f",
		b.GetMean(), mean, b.GetStandardDeviation(), sd, p.below(b.GetInterval().GetLower()), p.below(b.GetInterval().GetUpper()))
}

// postText posts one reading, given without its quantity.
func (s *service) postText(id, reading string) {
	s.t.Helper()
	response := new(leadlinev1.PostReadingsResponse)
	s.call("POST", "/v1/readings", fmt.Sprintf(`{"readings":[{"quantity":%q,%s}]}`, id, reading)).into(response)
	if response.GetAppliedCount() != 1 {
		s.t.Fatalf("%s: %v", reading, response)
	}
}

// A reading that tells only where the value lies, by an instrument that hardly errs, truncates a standard
// normal prior. Mean and variance are those of the truncated normal (Johnson, Kotz & Balakrishnan
// 1994, vol. 1, 13.10), 0.7979, 0.3634, 1.5251 and 0.1991 in many tables, both from memory; all digits
// by SciPy. The repeatability of 1e-5 moves them by less than 1e-8, and integration over ten decades by less
// than 1e-6.
func TestOneSidedReadingsTruncateThePrior(t *testing.T) {
	s := start(t)
	for i, tt := range []struct {
		reading        string
		mean, variance float64
		printed        [2]string
	}{
		{`"above":0`, 0.797884560803, 0.363380227632, [2]string{"0.7979", "0.3634"}},
		{`"above":1`, 1.52513527616, 0.19909766557, [2]string{"1.5251", "0.1991"}},
		{`"above":2`, 2.37321553282, 0.114279100414, [2]string{"2.3732", "0.1143"}},
		{`"below":0`, -0.797884560803, 0.363380227632, [2]string{"-0.7979", "0.3634"}},
		{`"above":-2`, 0.055247862679, 0.886451948311, [2]string{"0.0552", "0.8865"}},
		{`"between":{"lower":-1,"upper":1}`, 0, 0.291125094773, [2]string{"0.0000", "0.2911"}},
		{`"between":{"lower":-0.5,"upper":0.5}`, 0, 0.0805891546008, [2]string{"0.0000", "0.0806"}},
		{`"between":{"lower":0,"upper":1}`, 0.459862229286, 0.0796518248485, [2]string{"0.4599", "0.0797"}},
		{`"between":{"lower":1,"upper":2}`, 1.38316904663, 0.0727428861006, [2]string{"1.3832", "0.0727"}},
		{`"between":{"lower":5,"upper":6}`, 5.18314709048, 0.0294524307685, [2]string{"5.1831", "0.0295"}},
	} {
		id := fmt.Sprint("truncated-", i)
		s.declare(id, `{"unit":"","prior":{"mean":0,"standard_deviation":1},"repeatability":{"standard_deviation":1e-5}}`)
		s.postText(id, tt.reading)
		b := s.belief(id, time.Time{})
		if math.Abs(b.GetMean()-tt.mean) > 1e-6 {
			t.Errorf("%s: mean %v, want %v", tt.reading, b.GetMean(), tt.mean)
		}
		wantNear(t, tt.reading+": variance", square(b.GetStandardDeviation()), tt.variance, 1e-6)
		if b.GetMean() > 1e-7 || b.GetMean() < -1e-7 {
			wantPrinted(t, tt.reading, b.GetMean(), tt.printed[0])
		}
		wantPrinted(t, tt.reading, square(b.GetStandardDeviation()), tt.printed[1])
	}
}

// One reading of a display of resolution 1, nothing known before: its error is a normal one and one
// uniform over the step, so the variance is r^2 + 1/12, at any r (Sheppard 1898, from memory; exact
// here as the level is flat). At r = 0 that is the 0.29 of JCGM 100:2008, F.2.2.1. A display more than
// 300 times as coarse as r is refused.
func TestDisplayHasTheVarianceOfSheppard(t *testing.T) {
	s := start(t)
	for _, r := range []float64{0.0034, 0.02, 0.1, 0.3, 0.5, 0.9, 1, 2} {
		id := "display-" + number(r)
		s.call("PUT", "/v1/instruments/"+id, `{"unit":"","resolution":1,"repeatability":{"standard_deviation":`+number(r)+`}}`).ok()
		s.declare(id, `{"unit":""}`)
		s.postText(id, `"value":20,"instrument":"`+id+`"`)
		b := s.belief(id, time.Time{})
		wantNear(t, id+": mean", b.GetMean(), 20, 1e-9)
		wantNear(t, id+": standard deviation", b.GetStandardDeviation(), math.Sqrt(r*r+1.0/12), 1e-6)
		if r == 0.0034 {
			wantPrinted(t, "JCGM 100:2008, F.2.2.1", b.GetStandardDeviation(), "0.29")
		}
	}
	s.declareInstrument("display-0.0033", `{"unit":"","resolution":1,"repeatability":{"standard_deviation":0.0033}}`)
	s.declare("display-0.0033", `{"unit":""}`)
	refused := s.postHTTP([]posted{{Quantity: "display-0.0033", Value: 20, Instrument: "display-0.0033"}}).GetResults()[0]
	if refused.GetReason() != string(engine.NotSupported) {
		t.Errorf("a display 303 times as coarse as its noise: %v", refused)
	}
	checkSentence(t, refused.GetDetail(), "resolution")
}

// A hundred equal readings of a display: each says that the level lies within the step, but for what
// the noise may have moved. As readings with the variance r^2 + d^2/12 they would make
// the belief nine times too sure at r = 0.02.
func TestEqualReadingsOfADisplay(t *testing.T) {
	s := start(t)
	for _, r := range []float64{0.02, 0.1, 0.3, 0.6} {
		t.Run(number(r), func(t *testing.T) {
			s, id := s.under(t), "equal-"+number(r)
			s.call("PUT", "/v1/instruments/"+id, `{"unit":"","resolution":1,"repeatability":{"standard_deviation":`+number(r)+`}}`).ok()
			s.declare(id, `{"unit":""}`)
			var all []posted
			for i := range 100 {
				all = append(all, posted{Quantity: id, Value: 20, Instrument: id, ID: fmt.Sprint(i)})
			}
			s.postAll(all)
			p := newPlane(20, 0.1, 4, 8001, r)
			p.take(func(mu, r float64) float64 { return 100 * math.Log(upper((19.5-mu)/r)-upper((20.5-mu)/r)) })
			wantBelief(t, s.belief(id, time.Time{}), p)
		})
	}
}

// guptaDays are the days that seven of ten mice survived, after which the test ended
// (Gupta 1952, Biometrika 39, 260-273, from memory). He takes log10, 1.613 to 1.778,
// and by maximum likelihood finds the mean 1.742 and the standard deviation 0.079.
var guptaDays = []float64{41, 44, 46, 54, 55, 58, 60}

// guptaPlane is the exact posterior of the mean of ln days. survived are the mice of which only a limit is known.
func guptaPlane(survived int, rs ...float64) *plane {
	p := newPlane(math.Log(55), 0.05, 7, 1501, rs...)
	p.take(func(mu, r float64) float64 {
		log := float64(survived) * math.Log(upper((math.Log(60)-mu)/r))
		for _, y := range guptaDays {
			log += logNormal(math.Log(y), mu, r)
		}
		return log
	})
	return p
}

// The likelihood of the ten mice has its maximum where Gupta printed it, which
// bears out what was remembered of the data: by climbing from his numbers in ever smaller steps.
func TestLikelihoodOfGuptasMice(t *testing.T) {
	likelihood := func(mu, sd float64) float64 {
		log := 3 * math.Log(upper((1.778-mu)/sd))
		for _, y := range guptaDays {
			log += logNormal(math.Round(1000*math.Log10(y))/1000, mu, sd)
		}
		return log
	}
	mu, sd := 1.7, 0.1
	for step := 0.01; step > 1e-7; step /= 2 {
		for moved := true; moved; {
			moved = false
			for _, to := range [...][2]float64{{mu + step, sd}, {mu - step, sd}, {mu, sd + step}, {mu, sd - step}} {
				if likelihood(to[0], to[1]) > likelihood(mu, sd) {
					mu, sd, moved = to[0], to[1], true
				}
			}
		}
	}
	wantPrinted(t, "mean of log10", mu, "1.742")
	wantPrinted(t, "standard deviation of log10", sd, "0.079")
}

// With Gupta's standard deviation as repeatability, the belief of the logarithm is about his
// estimate, and with one that is learned it is wider; both as integration has it. Taking
// the three for readings of 60 would be 2 days too low.
func TestCensoredLives(t *testing.T) {
	s := start(t)
	const known = 0.079 * math.Ln10
	for _, tt := range []struct {
		name, repeatability string
		exact               *plane
	}{
		{"known", `{"standard_deviation":` + number(known) + `}`, guptaPlane(3, known)},
		{"learned", `{"learned":{"guess":0.2,"worth":4}}`, func() *plane {
			p := guptaPlane(3, 0.02, 20)
			p.take(func(_, r float64) float64 { return -4*math.Log(r) - 4*0.2*0.2/(2*r*r) })
			return p
		}()},
	} {
		t.Run(tt.name, func(t *testing.T) {
			s, id := s.under(t), "mice-"+tt.name
			s.declare(id, `{"unit":"d","scale":"LOG","repeatability":`+tt.repeatability+`}`)
			for _, y := range guptaDays {
				s.postText(id, `"value":`+number(y))
			}
			for range 3 {
				s.postText(id, `"above":60`)
			}
			b := s.belief(id, time.Time{})
			mean, sd := tt.exact.moments()
			wantLogBelief(t, b, tt.exact)
			if off := math.Log10(b.GetGeometricMean()) - 1.742; math.Abs(off) > 0.2*sd/math.Ln10 {
				t.Errorf("log10 of the geometric mean is %v from Gupta's 1.742, integration has %v +- %v", off, mean/math.Ln10, sd/math.Ln10)
			}
		})
	}
}

// wantLogBelief is wantBelief of a belief on the scale LOG.
func wantLogBelief(t *testing.T, b *leadlinev1.Belief, p *plane) {
	t.Helper()
	_, sd := p.moments()
	for _, q := range []struct {
		at, want float64
	}{{b.GetInterval().GetLower(), 0.025}, {b.GetInterval().GetUpper(), 0.975}, {b.GetGeometricMean(), 0}} {
		if q.want == 0 {
			mean, _ := p.moments()
			if math.Abs(math.Log(q.at)-mean) > 0.01*sd {
				t.Errorf("ln of the geometric mean %v, want %v +- %v", math.Log(q.at), mean, sd)
			}
			continue
		}
		if got := p.below(math.Log(q.at)); math.Abs(got-q.want) > 0.00175 { // as in wantBelief
			t.Errorf("%v lies below %v, want %v", got, q.at, q.want)
		}
	}
	wantNear(t, "geometric standard deviation", math.Log(b.GetGeometricStandardDeviation()), sd, 0.03)
}

// Mirrored, lives above a limit are concentrations below one: the belief is mirrored too.
func TestBelowMirrorsAbove(t *testing.T) {
	s := start(t)
	for _, side := range []struct {
		id, limit string
		sign      float64
	}{{"upward", "above", 1}, {"downward", "below", -1}} {
		s.declare(side.id, `{"unit":"","repeatability":{"learned":{"guess":0.2,"worth":4}}}`)
		for _, y := range guptaDays {
			s.postText(side.id, `"value":`+number(side.sign*math.Log(y)))
		}
		for range 3 {
			s.postText(side.id, `"`+side.limit+`":`+number(side.sign*math.Log(60)))
		}
	}
	up, down := s.belief("upward", time.Time{}), s.belief("downward", time.Time{})
	wantNear(t, "mean", -down.GetMean(), up.GetMean(), 1e-9)
	wantNear(t, "standard deviation", down.GetStandardDeviation(), up.GetStandardDeviation(), 1e-6)
	wantNear(t, "lower end", -down.GetInterval().GetUpper(), up.GetInterval().GetLower(), 1e-6)
	wantNear(t, "upper end", -down.GetInterval().GetLower(), up.GetInterval().GetUpper(), 1e-6)
}

// A repeatability that is learned by filters at nodes gives Student's distribution where
// the exact sums do: the interval of n equal spread readings is that of the tables
// (Abramowitz & Stegun 1964, table 26.10, 95 % two-sided, from memory).
func TestFiltersAtNodesGiveStudentsTable(t *testing.T) {
	s := start(t)
	for degrees, printed := range map[int]string{5: "2.571", 10: "2.228", 20: "2.086", 30: "2.042", 60: "2.000"} {
		id := fmt.Sprint("student-", degrees)
		s.declare(id, `{"unit":"",`+unknown+`,"step_detection":{"on_step":{"widen":1}}}`)
		n := float64(degrees + 1)
		sum := 0.0 // the variance of 0 to n - 1, taken in turn from either end so that no step shows
		var values []float64
		for i := range degrees + 1 {
			values = append(values, float64(i/2))
			if i%2 == 1 {
				values[i] = n - 1 - values[i]
			}
			sum += square(values[i]-(n-1)/2) / (n - 1)
		}
		s.postAll(timedReadings(id, values, daily(degrees+1)))
		b := s.belief(id, time.Time{})
		if b.GetMethod() != "BANK" {
			t.Fatalf("method %s", b.GetMethod())
		}
		half := (b.GetInterval().GetUpper() - b.GetInterval().GetLower()) / 2 / math.Sqrt(sum/n)
		// z to 0.001 at 0.025 is 6e-5 in probability; dt/dp is at most 30 for five degrees.
		if want := parse(t, printed); math.Abs(half-want) > 0.0005+0.0018 {
			t.Errorf("t of %d degrees is %v, want %s", degrees, half, printed)
		}
	}
}
